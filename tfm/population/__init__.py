"""Room ``population`` (being built)."""
