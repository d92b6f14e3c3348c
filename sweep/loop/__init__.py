"""Physics in plain numpy: loop parameters -> sampled plant, realised controller, closed loop."""
