"""What measurements did tell: fit, variance components, model choice."""
