"""When it gets there: trajectories, the laws of one axis, and several axes together."""
