"""Room ``batch`` (being built)."""
