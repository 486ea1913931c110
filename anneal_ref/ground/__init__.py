"""Exact classical ground energies: always a value and a bound."""
