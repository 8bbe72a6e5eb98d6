"""Room ``synth`` (being built)."""
