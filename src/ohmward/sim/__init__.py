"""A simulated bench, which shares no physics, no codec and no reader with what it tests."""
