"""The bench without its picture: what is asked, keyed, taken and thought of between a sheet and the screen."""
