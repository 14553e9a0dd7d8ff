"""From what was received to what was protected, one block at a time.

`block` runs the steps for one block; `trials` says which symbols to erase, in which order, and which
solutions may be believed; `bursts` tells bursts from scattered flips in the final error pattern.
"""
