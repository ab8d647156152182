"""The other side of each comparison: what a careful user would write by hand for one equation."""
