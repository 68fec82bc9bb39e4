"""What is known: rows of finite rotations, the conventions they were printed in, chains to a frame."""
