"""Effects of exposures nobody randomised, from household surveys."""
