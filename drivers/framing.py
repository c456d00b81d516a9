"""COBS on a byte stream: stuffing, and splitting what arrives at the zero bytes; pure."""

from collections import Counter

from cobs import cobs

DELIMITER = b"\0"


def stuff(frame: bytes) -> bytes:
    """The frame as it goes on a serial line: without zero bytes, then one zero byte."""
    stuffed: bytes = cobs.encode(frame) + DELIMITER
    return stuffed


class FrameSplitter:
    """Cuts a byte stream into frames; garbage costs the frame it hits and nothing else."""

    def __init__(self, max_frame: int) -> None:
        """`max_frame` is the length of the longest frame before stuffing."""
        self._max_stuffed = max_frame + max_frame // 254 + 1
        self._rest = b""
        self._skipping = False
        self.errors: Counter[str] = Counter()

    def feed(self, data: bytes) -> list[bytes]:
        """Frames completed by these bytes, unstuffed and not verified."""
        *whole, rest = (self._rest + data).split(DELIMITER)
        if whole and self._skipping:
            # The end of a run that was already counted as too long.
            del whole[0]
            self._skipping = False
        if len(rest) > self._max_stuffed:
            if not self._skipping:
                self.errors["length"] += 1
            self._skipping, rest = True, b""
        self._rest = rest
        # Two delimiters in a row are allowed: a sender may flush the line with one.
        unstuffed = [self._unstuff(stuffed) for stuffed in whole if stuffed]
        return [frame for frame in unstuffed if frame is not None]

    def _unstuff(self, stuffed: bytes) -> bytes | None:
        """None for what is too long or cannot be."""
        if len(stuffed) > self._max_stuffed:
            self.errors["length"] += 1
            return None
        try:
            frame: bytes = cobs.decode(stuffed)
        except cobs.DecodeError:
            self.errors["cobs"] += 1
            return None
        return frame
