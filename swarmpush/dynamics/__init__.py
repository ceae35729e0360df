"""The body world: rigid bodies in contact, on pymunk."""
