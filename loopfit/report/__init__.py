"""Results as a page of text and as a picture."""
