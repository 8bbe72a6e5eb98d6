"""Room ``images`` (being built)."""
