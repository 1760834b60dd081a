"""Markers to trials and candidate epochs. Knows no file and no signal."""
