"""AC power flow, limits and the first-violation search on plain arrays, per unit."""
