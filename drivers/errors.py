"""Whose fault it was: the bytes', the line's, or ours. No foreign exception crosses the drivers."""


class DriverError(Exception):
    """Base of all errors of the wire and its links; its text is fit for an operator."""


class WireError(DriverError, ValueError):
    """The peer's bytes were wrong; it is counted, nothing else. `kind` is a short fixed word."""

    def __init__(self, kind: str, text: str) -> None:
        super().__init__(text)
        self.kind = kind


class MessageMisuse(DriverError, ValueError):
    """This side built a message that the protocol does not allow."""


class LinkError(DriverError, OSError):
    """The link could not be opened or configured."""


class LinkBusy(LinkError):
    """The port or address is held by another program."""


class LinkLost(LinkError):
    """The line broke while in use: unplugged, closed by the peer, or blocked for too long."""
