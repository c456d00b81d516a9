"""A rig made of software: plants, faults and a responder written from drivers/PROTOCOL.md alone."""
