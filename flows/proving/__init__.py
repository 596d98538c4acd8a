"""Proving a site's gates: plates simulated as an assay makes them, with faults of chosen sizes.

Says how often each gate holds what is clean, and from which size of a fault on it catches it. Stands on
stages, site and warehouse; overnight, morning and history know nothing of it.
"""
