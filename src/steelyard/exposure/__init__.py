"""Who is exposed: propensity models, balancing weights, trimming, overlap."""
