"""Whether the groups are comparable: moments, distributions, moment conditions, before and after."""
