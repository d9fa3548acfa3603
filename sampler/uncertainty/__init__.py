"""What measurements would tell: noise, priors, information, limits."""
