"""A page of figures and text, from store views only."""
