"""The fast loops: strip map, word codec, column decoder.

Nothing is imported here: `oakum.kernels.stripmap` and its neighbours import numba, which costs a
third of a second, so callers import them only where they are about to run one.
"""
