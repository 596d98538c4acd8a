"""What happens, in order: exports in, gated and fitted results out, every number traced."""
