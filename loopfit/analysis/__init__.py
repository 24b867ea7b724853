"""The whole chain from a record to a result."""
