"""What the driver sees and hears: the overlay window and the voice, each its own process."""
