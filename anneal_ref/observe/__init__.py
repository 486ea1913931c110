"""Moments, observables and a processor's samples."""
