"""Start the voice process: `python -m canticle_overlay.speech --bus ENDPOINT`."""

if __name__ == "__main__":
    # Inside the guard: the renderer's child imports this file too, and needs none of it.
    from canticle_overlay.speech.voice import main

    raise SystemExit(main())
