"""Floor 1: the world around the bridge: wire, ports, simulator, bridge files."""
