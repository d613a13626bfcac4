"""Images to curves, in pixels of the upright picture. Knows no law of motion."""
