"""Pure functions: moments in, judgements out."""
