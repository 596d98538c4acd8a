"""From signal to product and from rate to activity: standard curves, path lengths, activity units."""
