"""Random input: keyed streams, normals, and the coupling of fine and coarse paths."""
