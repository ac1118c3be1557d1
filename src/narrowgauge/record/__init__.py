"""Documents: their types, their canonical text, their strict reader."""
