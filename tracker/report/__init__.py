"""Results as files that people keep: tables, plots, overlay video, page."""
