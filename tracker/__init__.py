"""The application: a phone clip and its run sheet in, metres, seconds and an answer out."""
