"""The room of the analyst and the auditor: how answers are written out, and where a number came from."""
