"""Room ``traction`` (being built)."""
