"""Readings to one frame per unit per tick; the running state."""
