"""From multipliers to price components, and whether they may be believed."""
