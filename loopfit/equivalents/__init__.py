"""Equivalent second-order models of a transfer function, and how good each is."""
