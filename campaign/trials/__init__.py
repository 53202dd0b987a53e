"""One module per kind of trial: recording to features."""
