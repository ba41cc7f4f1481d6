"""Solve one interval under one formulation; every formulation returns the same neutral result."""
