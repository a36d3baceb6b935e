"""What the driver sees and hears: the overlay window and the voice, each its own process.

Open `window.py` (what is drawn) or `speech/voice.py` (what is spoken) first.
"""

import os

# Standard output carries states for the daemon: pygame's greeting must stay off it.
os.environ.setdefault("PYGAME_HIDE_SUPPORT_PROMPT", "1")
