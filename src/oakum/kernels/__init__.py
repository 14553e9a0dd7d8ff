"""The fast loops: strip map, word codec, column decoder, and the digests of cells.

Nothing is imported here. The modules whose names end in `_kernels`, and those that only they use, import
numba, which costs a third of a second: they are for `oakum.kernels.compiling` alone, when it compiles.
"""
