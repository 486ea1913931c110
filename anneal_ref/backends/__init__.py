"""Interchangeable solvers of the Schrodinger equation."""
