"""Recorded drives: strips and odometry in memory, their tables on disk, and what is measured on them."""
