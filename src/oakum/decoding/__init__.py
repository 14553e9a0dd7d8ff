"""From what was received to what was protected, one block at a time.

`source` is what the decoder is given and gives back; `block` runs the steps; `cells` holds the cells that
were not right, `columns` the columns not solved yet. `trials` says which symbols to erase, `distances` and
`trials` which solutions may be believed; `bursts` tells bursts from scattered flips in the final pattern.
"""
