"""Makes a record, commits trials and a request, tidies up in between; says what is committed."""

import os
import sys
from pathlib import Path

from record_parts import carry, fill, new_writer, open_writer, request


def say(count):
    """One write each, so that its place among the other system calls is known."""
    os.write(1, f"committed {count}\n".encode())


path = Path(sys.argv[1])
writer = new_writer(path)
say(0)
for k in range(3):
    fill(writer, 1)
    say(k + 1)
    if k == 1:
        writer.checkpoint()
writer.commit_request(request(1), writer.state, carry(77))
writer.close()
writer = open_writer(path)
for k in range(3, 6):
    fill(writer, 1)
    say(k + 1)
    writer.checkpoint()
writer.close()
