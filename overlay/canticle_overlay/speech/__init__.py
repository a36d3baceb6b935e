"""The voice: phrases rendered ahead by a speech engine, played at once when a cue comes."""
