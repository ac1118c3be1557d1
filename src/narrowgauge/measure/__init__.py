"""From a kernel and its draws to mergeable moments."""
