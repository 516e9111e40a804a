"""Pages that show what the store holds."""
