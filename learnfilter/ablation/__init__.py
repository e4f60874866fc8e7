"""Does the learned model win: contenders, statistics, verdict."""
