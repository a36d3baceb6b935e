"""Errors, told apart by what the caller should do.

CanticleError
├── ConfigError      the user's file or option is wrong: say where, exit 2
├── SystemFaultError     the machine refused (port, folder, process): say what, exit 1
├── LogFormatError   a session or recording is malformed: say where, exit 2
└── AdapterError
    ├── AdapterLoadError   no such adapter, or it is broken: exit 2
    └── DecodeError        the sender's fault: count, drop, go on
"""


class CanticleError(Exception):
    """Base of every error of ours; its text is one line for the user."""


class ConfigError(CanticleError):
    """A config, track, car or layout file, or an option, is wrong; the text names file and key."""


class SystemFaultError(CanticleError):
    """The system refused what was asked, for example a port that is in use."""


class LogFormatError(CanticleError):
    """A session folder or a recording cannot be read; the text names file and line."""


class AdapterError(CanticleError):
    """Something about an adapter."""


class AdapterLoadError(AdapterError):
    """An adapter is not known or failed to load."""


class DecodeError(AdapterError):
    """A datagram is malformed: the sender's fault, never a reason to stop."""
