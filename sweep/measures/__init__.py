"""What is computed at a node, and the compiled kernels under it."""
