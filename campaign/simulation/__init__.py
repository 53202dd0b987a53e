"""Synthetic campaigns with known truth, for the demonstration and for rehearsals."""
