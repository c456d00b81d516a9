"""The daemon's side of the wire, without I/O: frames and time in, frames and events out.

`Conversation` is the only part that the session uses; the other files are its organs.
"""

from trialrunner.conversation.conversation import Conversation
from trialrunner.conversation.timing import LinkTiming

__all__ = ["Conversation", "LinkTiming"]
