"""Writes trials into the record named on the command line until it is killed, and says so."""

import sys
from pathlib import Path

from record_parts import fill, new_writer, open_writer

path = Path(sys.argv[1])
print("begin", flush=True)
writer = open_writer(path) if path.exists() else new_writer(path)
print("ready", flush=True)
while True:
    fill(writer, 1)
    print(writer.state.trial - 1, flush=True)
    if writer.state.trial % 3 == 0:
        writer.checkpoint()
