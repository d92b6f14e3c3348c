"""Sweep sampled control loops into an atlas of closed-loop eigenvalues, and ask it."""
