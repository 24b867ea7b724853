"""New settings for a loop: what is wanted, the design, its uncertainty, the stages to it."""
