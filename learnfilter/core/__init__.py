"""What every other room stands on: errors, axes checks, poses, grids, strips, seeds, files."""
