"""A residual Helmholtz surface through all that was measured: every property between the sampled states."""
