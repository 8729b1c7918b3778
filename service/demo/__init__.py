"""The bundled demonstration: an invented option chain and what makes it."""
