"""The base of every record: frozen, and an unknown key is an error.

This module knows no file: `flows.site.configuration` reads TOML and turns a failure into a message that
names file, key and what is allowed.
"""

from pydantic import BaseModel, ConfigDict


class Record(BaseModel):
    """A frozen record that refuses keys it does not know and numbers that are not finite."""

    model_config = ConfigDict(
        frozen=True,
        extra="forbid",
        str_strip_whitespace=True,
        allow_inf_nan=False,
        use_attribute_docstrings=True,
    )
