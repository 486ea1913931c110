"""The exact state vector."""
