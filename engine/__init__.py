"""The engine's face: everything the service may import."""
