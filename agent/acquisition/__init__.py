"""Sources: plant tags to readings."""
