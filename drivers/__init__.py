"""The rig side of the wire: the protocol, its pure codec, and one file for each link."""
