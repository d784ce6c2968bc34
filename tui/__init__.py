"""Floor 2: people: the command line and the screens."""
