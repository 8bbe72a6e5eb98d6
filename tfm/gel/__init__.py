"""Room ``gel`` (being built)."""
