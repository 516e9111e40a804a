"""What is alarmed, by which rule, in which state."""
