"""The demonstration: a simulated robot drives through a room with the real nodes over DDS."""
