"""All Qt and all plotting."""
