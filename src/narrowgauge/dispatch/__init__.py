"""The duck array: how a kernel's NumPy reaches the emulated arithmetic."""
