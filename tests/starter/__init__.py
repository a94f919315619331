"""A first study: what is written, and what is guessed of a table."""
