"""What things are: plates, records, tables, kinetics. Pure: no file, clock, network or database."""
