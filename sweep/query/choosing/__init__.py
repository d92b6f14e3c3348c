"""The best design at every sample period, and what each tolerance costs."""
