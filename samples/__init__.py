"""Shipped riffs, example tray and fixture; all invented, see the seeded scripts beside them."""
