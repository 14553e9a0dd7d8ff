"""The members' SHA-256 in the form that checksum tools read."""

from oakum.results import Description

# A line whose name holds one of these begins with a backslash, and the name is escaped so
# (GNU coreutils manual, "md5sum invocation").
_ESCAPES = ((b"\\", b"\\\\"), (b"\n", b"\\n"), (b"\r", b"\\r"))


def checksum_lines(description: Description) -> bytes:
    """One line a file, `<64 hex digits>  <name>`, names as the raw bytes that the file system has.

    Folders and links have no digest and no line. Check with `sha256sum -c` in the sidecar's folder.
    """
    return b"".join(
        _line(member.sha256, member.raw_path) for member in description.members if member.sha256 is not None
    )


def _line(digest: bytes, name: bytes) -> bytes:
    escaped = name
    for plain, escape in _ESCAPES:
        escaped = escaped.replace(plain, escape)
    mark = b"\\" if escaped != name else b""
    return mark + digest.hex().encode() + b"  " + escaped + b"\n"
