"""The site file, read once into frozen values."""
