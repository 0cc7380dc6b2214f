"""What may have happened: a family is a path, an inner change and the priors of their parameters."""
