"""The request queue: sites, what fits, rule screens, remedies, letters."""
