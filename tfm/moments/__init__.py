"""Room ``moments`` (being built)."""
