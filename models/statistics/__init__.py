"""Statistics of plates and lots: moderated variances, combination of plate reads."""
