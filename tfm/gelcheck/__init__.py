"""Room ``gelcheck`` (being built)."""
