"""How two columns hang together."""
