"""Built-in telemetry sources, each a codec from a datagram to a frame."""
