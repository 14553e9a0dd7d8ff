"""Line ends that were converted: undo it, and see whether the file is the recorded one again."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable


def undone(chunks: Iterable[bytes], size: int, sha256: bytes | None) -> str:
    """What was converted in a file that should be `size` bytes with `sha256`; empty where nothing was.

    The file comes in `chunks`. Where undoing the conversion gives the recorded SHA-256 the sentence says so;
    counts alone (as many bytes more or fewer as there are line ends) are weaker evidence.
    """
    length = pairs = feeds = returns = 0
    shortened, lengthened = hashlib.sha256(), hashlib.sha256()
    carried = b""
    for chunk in chunks:
        length += len(chunk)
        chunk = carried + chunk
        carried = b"\r" if chunk.endswith(b"\r") else b""
        whole = chunk[: len(chunk) - len(carried)]
        pairs += whole.count(b"\r\n")
        feeds += whole.count(b"\n")
        returns += whole.count(b"\r")
        shortened.update(whole.replace(b"\r\n", b"\n"))
        lengthened.update(whole.replace(b"\n", b"\r\n"))
    returns += len(carried)
    shortened.update(carried)
    lengthened.update(carried)
    if pairs and shortened.digest() == sha256:
        return f"with each of {pairs:,} pairs CR LF made LF again the SHA-256 is the recorded one"
    if feeds and lengthened.digest() == sha256:
        return f"with each of {feeds:,} LF made CR LF again the SHA-256 is the recorded one"
    if pairs and pairs == feeds == length - size:
        return f"the file is {pairs:,} bytes longer and has as many line ends, each of them CR LF"
    if feeds and not returns and feeds == size - length:
        return f"the file is {feeds:,} bytes shorter and has as many line ends, each of them LF alone"
    return ""
