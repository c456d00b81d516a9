"""The pure part: numpy and scipy only; no clock, file, socket, log or randomness of its own."""
