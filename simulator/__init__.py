"""An invented plant with its own physics, for demos and tests."""
