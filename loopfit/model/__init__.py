"""The second-order model with dead time, and its response."""
