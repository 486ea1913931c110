"""Chains and rings without fields as free fermions."""
