"""What is moved: sites, and how fast; each through a Circuit, back through time."""
