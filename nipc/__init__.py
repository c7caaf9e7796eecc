"""nipc."""
