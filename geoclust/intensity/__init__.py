"""First order: constant, log-linear on covariates, and kernel intensity."""
