"""The estimator and its intervals."""
