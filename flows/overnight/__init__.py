"""Overnight: one pass over what has arrived, by hand or on the site's schedule, unattended."""
