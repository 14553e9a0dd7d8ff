"""One file a command: what the commands do, without any of how they look."""

DEFAULT_MEMORY = 384 << 20
"""Bytes that the buffers of a job take at most."""
