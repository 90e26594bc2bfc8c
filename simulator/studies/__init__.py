"""Studies: questions answered by many runs of one case (formulation.md 6)."""
