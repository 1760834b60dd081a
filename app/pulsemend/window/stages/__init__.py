"""The stages of the window: each has settings beside the traces and a picture below them."""
