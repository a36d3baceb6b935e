"""The daemon: datagrams in; friction demand, turn-ins and cues out."""

__version__ = "0.1.0"
