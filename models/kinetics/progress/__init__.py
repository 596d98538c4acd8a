"""Whole progress curves: the integrated rate law, its fit to a series, its comparison with initial rates, and
lag and burst. The public functions are named in the modules they live in."""
