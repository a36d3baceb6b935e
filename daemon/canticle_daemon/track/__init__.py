"""The track: its file, and what is asked of it on every frame."""
