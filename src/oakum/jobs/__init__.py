"""One file a command: what the commands do, without any of how they look."""
