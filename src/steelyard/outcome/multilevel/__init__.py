"""Outcome models with clusters in them, under a weight at each level."""
