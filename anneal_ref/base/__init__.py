"""The ground floor: errors, border checks, estimates, identities, run settings, storage, provenance."""
