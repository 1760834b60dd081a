"""Epoch sets: containers, atomic folders, read-back."""
