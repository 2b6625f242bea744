"""One module per Processing algorithm: parameters, help text, and read, compute, write."""
