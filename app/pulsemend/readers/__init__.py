"""A file becomes a Recording."""
