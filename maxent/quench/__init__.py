"""From initial data to the stationary state: charges, starts, dynamics, ensembles, comparison."""
