"""The relaxation, its conditions, its solver, and the proof that needs none."""
