"""The stacked traces: our own renderer, its overlays, and the hands on it."""
