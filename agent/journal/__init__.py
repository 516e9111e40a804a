"""What people asked and what the alarm system did, append-only."""
