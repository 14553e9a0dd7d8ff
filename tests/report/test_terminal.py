"""Nothing that a file is called can make a terminal do anything."""

import io
import unicodedata

from hypothesis import given
from hypothesis import strategies as st
from rich.console import Console
from rich.text import Text

from oakum.report.terminal import safe

# Any characters at all, and names as Python holds those that are not UTF-8 (PEP 383).
NAMES = st.one_of(
    st.text(st.characters()), st.binary().map(lambda raw: raw.decode("utf-8", "surrogateescape"))
)
# Unicode Standard Annex 9, section 2: explicit directional formatting characters, implicit marks (memory).
BIDIRECTIONAL = "\u061c\u200e\u200f\u202a\u202b\u202c\u202d\u202e\u2066\u2067\u2068\u2069"


@given(NAMES)
def test_no_character_that_a_terminal_obeys_is_left(name: str) -> None:
    shown = safe(name)
    assert not set(shown) & set(BIDIRECTIONAL)
    assert all(unicodedata.category(c) not in ("Cc", "Cs", "Zl", "Zp") for c in shown)
    shown.encode()  # and it can be written


@given(NAMES)
def test_twice_is_once(name: str) -> None:
    assert safe(safe(name)) == safe(name)


@given(NAMES)
def test_rich_shows_it_letter_by_letter(name: str) -> None:
    console = Console(file=io.StringIO(), width=100_000, color_system="truecolor", force_terminal=True)
    console.print(Text(safe(name)), end="", soft_wrap=True)
    assert console.file.getvalue() == safe(name)  # type: ignore[attr-defined]


@given(st.text(st.characters(categories=("L", "M", "N", "P", "S", "Zs"))))
def test_ordinary_text_in_any_script_stays(text: str) -> None:
    assert safe(text) == text


def test_examples() -> None:
    assert safe("a\x1b[31mred") == "a\\x1b[31mred"
    assert safe("two\nlines\r\x7f\x9b") == "two\\x0alines\\x0d\\x7f\\x9b"
    assert safe("photo\u202egpj.exe") == "photo\\u202egpj.exe"
    assert safe(b"caf\xe9".decode(errors="surrogateescape")) == "caf\\xe9"
    assert safe("tag\U000e0041") == "tag\\U000e0041"
    assert safe("[bold]x[/]") == "[bold]x[/]"
    assert safe("می\u200cخواهم") == "می\u200cخواهم"  # Persian needs the zero-width non-joiner
