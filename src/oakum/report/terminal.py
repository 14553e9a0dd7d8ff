"""Makes foreign text, above all file names, harmless on a terminal."""

import unicodedata

# Zero-width joiners change nothing but the shape of the letters beside them, and Persian and several
# Indic scripts cannot be spelt without them. Every other character of their class is invisible or
# turns the direction of what follows.
_JOINERS = "\u200c\u200d"
_UNSAFE_CATEGORIES = frozenset(
    {
        "Cc",  # control characters, escape among them
        "Cf",  # format characters: bidirectional marks, overrides, isolates, tags
        "Cs",  # surrogates: bytes of a name that is not UTF-8
        "Zl",  # line separator
        "Zp",  # paragraph separator
    }
)


def safe(text: str) -> str:
    """`text` on one line, with nothing in it that a terminal would obey.

    Control, format and bidirectional characters are shown as escapes (`\\x1b`, `\\u202e`), bytes of
    names that are not UTF-8 (which Python holds as lone surrogates) as `\\xff`. All other characters
    stay as they are, square brackets too: what is handed to `rich` goes in as `rich.text.Text`, where
    brackets mean nothing. Applying it twice changes nothing more.
    """
    if text.isascii() and text.isprintable():
        return text
    return "".join(_escaped(c) if _is_unsafe(c) else c for c in text)


def _is_unsafe(character: str) -> bool:
    return unicodedata.category(character) in _UNSAFE_CATEGORIES and character not in _JOINERS


def _escaped(character: str) -> str:
    point = ord(character)
    if 0xDC80 <= point <= 0xDCFF:  # surrogateescape (PEP 383): an undecodable byte plus 0xDC00
        return f"\\x{point - 0xDC00:02x}"
    if point <= 0xFF:
        return f"\\x{point:02x}"
    return f"\\u{point:04x}" if point <= 0xFFFF else f"\\U{point:08x}"
