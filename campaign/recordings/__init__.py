"""Files to recordings in canonical units, every file accounted for."""
