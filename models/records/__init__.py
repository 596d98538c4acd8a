"""Pydantic records of what a person writes down: assays, export profiles, site settings; and its units."""
