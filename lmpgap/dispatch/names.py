"""The names of the formulations, apart from the code that solves them so that a command line can know them."""

FORMULATIONS = ("dc", "dc-loss", "soc", "ac")
"""In the order of the ladder: each step changes one assumption of the step before."""
