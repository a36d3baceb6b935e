"""A stand-in for the speech engine's child; a module of its own, for the child imports it."""

from __future__ import annotations

import os
import time
from multiprocessing.connection import Connection

from canticle_overlay.speech.engine import Job, Reply, VoiceSettings


def write_text(pipe: Connection[Reply, Job], settings: VoiceSettings) -> None:
    """Render by writing the text; some texts make it misbehave."""
    while True:
        try:
            job = pipe.recv()
        except EOFError:
            return
        if job.text == "die":
            os._exit(9)
        if job.text == "hang":
            job.path.with_suffix(f".{os.getpid()}.part").write_text("half")
            time.sleep(60)
        if job.text == "refuse":
            pipe.send("ValueError: refused")
            continue
        job.path.write_text(job.text)
        pipe.send(None)
