"""The differentiable Bayes filter on a lattice of poses."""
