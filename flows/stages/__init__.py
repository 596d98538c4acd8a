"""The steps of the line, as plain functions: pull, read, gate, fit, load, publish."""
