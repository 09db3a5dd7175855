"""The listening page: several takes in one file that a browser opens from disk."""
