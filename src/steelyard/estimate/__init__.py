"""Estimating equations over blocks: solve all weight columns at once and give the influence of each row."""
