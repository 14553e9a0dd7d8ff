"""The sidecar format: bytes in, records out. Nothing here opens, reads or writes a file.

`bootstrap` is the small record that says everything needed to find the rest; `layout` is the place of
every byte; `table` lists the members; `frames` codes the records; `text` is the page of plain words at
the top; `reading` turns a source of bytes into sections. The format page `oakum-sidecar.5` is normative.
"""
