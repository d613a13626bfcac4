"""From pixels to metres and from frames to seconds. Knows nothing of chains, of files or of pages."""
