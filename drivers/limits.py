"""Every limit of the wire protocol, by name, with the reason for its number."""

PROTOCOL_VERSIONS = (1,)
"""Versions that this side speaks, best last."""

HEADER_BYTES = 8
"""Session (u32) and sequence number (u32), little-endian, before the body."""

CRC_BYTES = 4

MAX_SERIAL_BODY_BYTES = 640
"""Body of a serial frame. Header + body = 648 bytes stays under 655, the length up to which
CRC-32C catches every error of up to 5 bits."""

SERIAL_BLOCK_BYTES = 600
"""Samples carried by one block on a serial line."""

MAX_MESSAGE_BODY_BYTES = 128 * 1024
"""Body of a frame on a message transport (ZeroMQ, memory)."""

MESSAGE_BLOCK_BYTES = 64 * 1024
"""Samples carried by one block on a message transport."""

MAX_TEXT_BYTES = 200
"""Names and reasons: what fits a serial frame with room for the rest of the message."""

MAX_UNIT_BYTES = 24
MAX_CHANNELS = 32
"""Inputs, outputs or auxiliary channels a rig may declare, each."""

MAX_SAMPLES = 16_000_000
"""Samples of one trial: over four hours at 1 kHz, and still under the record's 1 GB a blob."""

MAX_RANGES = 24
"""Gaps named in one resend request or table state; more are named in the next one."""

MAX_LISTS = 64
"""Arrays in one MessagePack body, of which no message has more than 2 + MAX_RANGES. A megabyte of
empty arrays would else become 65 megabytes of objects before any field is looked at."""

MAX_LIST_ITEMS = 64
"""Items of one array: more than any message has fields or any field has items."""

MAX_TICK_HZ = 1_000_000_000
MAX_BACKLOG_BYTES = 1 << 20
"""Bytes that a link's own queue holds: seconds of the fastest serial line; bulk is sent block by
block while the line is idle, so that only a dead line gets here."""
