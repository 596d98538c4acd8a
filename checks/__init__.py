"""What may be trusted: the structure suite, the gates and the verdicts drawn from their findings."""
