"""Replicate weights: made from the design, one file a method, or supplied with the extract; their variance."""
