"""A plant from a record made in manual or in automatic, and what casts doubt on it."""
