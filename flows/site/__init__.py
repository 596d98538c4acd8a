"""A site on disk: its folders, durable writes, the raw archive, kept recipes and the lock of a pass."""
