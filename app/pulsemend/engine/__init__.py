"""Fit and apply: the one chain from recorded samples to repaired epochs."""
