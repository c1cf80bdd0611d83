"""How estimates vary: strata, clusters, finite populations, domains, linearized variance."""
