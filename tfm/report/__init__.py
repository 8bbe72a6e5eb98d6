"""Room ``report`` (being built)."""
