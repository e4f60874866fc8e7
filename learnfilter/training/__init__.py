"""Training: analytic fits, matching stage, filter stage, checkpoints."""
