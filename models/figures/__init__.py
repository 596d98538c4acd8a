"""Figures: drawn one way for notebook, page, report and terminal. Arrays in, a matplotlib figure out.

Nothing here reads a file, computes a constant or knows a site.
"""
