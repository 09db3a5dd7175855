"""Shipped data: circuits (``circuit_*.toml``) and part types (``types.toml``)."""
