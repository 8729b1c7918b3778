"""The HTTP contract, checked from outside through HTTP alone."""
