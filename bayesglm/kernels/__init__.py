"""What shapes of kernel are allowed, how smooth they are, and the columns they make."""
