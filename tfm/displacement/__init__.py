"""Room ``displacement`` (being built)."""
