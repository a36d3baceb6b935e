"""The rehearsal: a synthetic car on a made-up oval that speaks only the wire format."""
