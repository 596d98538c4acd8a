"""Progress curves to rates, rates to constants. The public functions are named in the modules they live
in."""
