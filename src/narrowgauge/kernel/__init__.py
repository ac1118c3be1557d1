"""The user's side: the audit file, the kernel's contract, and how its code is loaded."""
