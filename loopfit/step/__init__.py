"""Finding the step, its size and its instant, and the noise around it."""
