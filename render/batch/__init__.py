"""Many takes from one plan: what there is to render, what is missing, and the index."""
