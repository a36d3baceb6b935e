"""Pure coaching: what an event is worth saying, and when."""
