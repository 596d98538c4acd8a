"""Pydantic records of everything a person writes down: assays, export profiles, site settings, plate-map units."""
