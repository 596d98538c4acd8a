"""The review page: what the night brought, and a person's word on it. Run by `halfsat morning`."""
