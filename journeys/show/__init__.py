"""Results as text and files: result in, text out."""
