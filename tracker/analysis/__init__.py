"""Curves to physics: laws, fits, uncertainty. No image, no file."""
