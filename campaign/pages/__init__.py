"""Results to what a reader sees: figures, tables and the numbers of sentences."""
