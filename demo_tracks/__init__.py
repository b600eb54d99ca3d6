"""The demo study of trackfit: an invented island, invented animals, invented data."""
