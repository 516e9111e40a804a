"""What a reciprocating gas compressor should do, as pure functions on numpy arrays."""
