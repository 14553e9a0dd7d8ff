"""The text that people read, from records built by hand."""

from dataclasses import replace

import pytest

from oakum.report.text import check_text, description_text, protect_text
from oakum.report.text.layout import table, width
from oakum.results import CheckResult, Description, MemberReport, MemberState, Outcome, ProtectResult


def test_intact(intact: CheckResult) -> None:
    assert check_text(intact) == (
        "Nothing is damaged: all 2 members are as they were protected.\n\n"
        "The sidecar itself is whole. It took 0.5 s.\n"
    )


def test_correctable_begins_with_what_matters(correctable: CheckResult) -> None:
    text = check_text(correctable)
    assert text.startswith("Every byte can be put right; the weakest block keeps 61 % of its margin.\n")
    assert "1,234 flipped bits in 3.00 MB read" in text
    assert "\n  oakum repair plates\n" in text


def test_margins_are_cumulative(correctable: CheckResult) -> None:
    text = check_text(correctable)
    section = text.split("Margin left, cumulative\n")[1].split("\n\n")[0].splitlines()
    # Two of five blocks are at 61 % and 62.5 %, one more at 93.75 %, two are clean.
    assert [line.split() for line in section[2:]] == [
        ["at", "most", "70", "%", "2", "40.0", "%"],
        ["at", "most", "100", "%", "5", "100.0", "%"],
    ]


def test_weakest_blocks_come_first(uncorrectable: CheckResult) -> None:
    lines = check_text(uncorrectable).split("weakest first\n")[1].split("\n\n")[0].splitlines()[2:]
    assert [line.split()[1:3] for line in lines] == [["1", "none"], ["2", "-3"], ["4", "62"]]
    assert "unknown" in lines[0]


def test_uncorrectable_says_what_is_lost(uncorrectable: CheckResult) -> None:
    text = check_text(uncorrectable)
    assert text.startswith("Not every byte can be put right: the damage in 1 of 5 blocks is beyond")
    assert "unknown" in text
    assert "plates/a.tif      4,096    512" in text
    assert "At least 1,234 flipped bits in 3.00 MB read." in text
    assert "The sidecar itself is damaged, 12 flipped bits, and can be put right." in " ".join(text.split())
    assert "1 altered member is newer than recorded" in " ".join(text.split())
    assert "below 0 %" in text
    unknown = replace(uncorrectable, totals=replace(uncorrectable.totals, bits_flipped=0))
    assert "How many bits are flipped in 3.00 MB read is not known." in check_text(unknown)
    assert "none, beyond correction" in text


def test_repair_speaks_of_what_was_done(correctable: CheckResult) -> None:
    written = correctable.members[0]._replace(mended=correctable.target / "a.mended.tif")
    whole = MemberReport("plates/c", 1, MemberState.INTACT, 0, mended=correctable.target / "c")
    result = replace(correctable, command="repair", members=(written, correctable.members[1], whole))
    text = check_text(result)
    assert text.startswith("Every byte was put right;")
    assert "Written\n  plates/a.mended.tif\n  and 1 whole member copied with them\n" in text
    assert "oakum repair" not in text


def test_one_block_has_no_distribution(correctable: CheckResult) -> None:
    one = replace(correctable, totals=replace(correctable.totals, blocks=1))
    assert "cumulative" not in check_text(one)


def test_an_absent_member_has_no_count_of_flips(correctable: CheckResult) -> None:
    line = next(line for line in check_text(correctable).splitlines() if "plates/b.tif" in line)
    assert line.split()[-3:] == ["-", "not", "there"]


def test_a_hostile_name_stays_on_its_line(correctable: CheckResult) -> None:
    evil = MemberReport("x\n\x1b[2J\u202e", 1, MemberState.ALTERED, 1, detail="\x07")
    text = check_text(replace(correctable, members=(evil,), notes=("note \x1b[0m",)))
    assert "x\\x0a\\x1b[2J\\u202e" in text
    assert "\x1b" not in text and "\x07" not in text


def test_long_lists_are_cut_and_say_so(correctable: CheckResult) -> None:
    members = tuple(MemberReport(f"m{i}", 1, MemberState.ALTERED, 1) for i in range(45))
    text = check_text(replace(correctable, members=members))
    assert "m39" in text and "m40" not in text
    assert "and 5 more; --json lists them all" in text


def test_a_target_with_blanks_is_quoted(correctable: CheckResult) -> None:
    text = check_text(replace(correctable, target=correctable.target / "my scans"))
    assert "oakum repair 'plates/my scans'" in text


def test_unchecked(intact: CheckResult) -> None:
    assert check_text(replace(intact, outcome=Outcome.UNCHECKED)).startswith("Nothing could be checked.")


def test_protect(protected: ProtectResult) -> None:
    text = " ".join(protect_text(protected).split())
    assert "plates.oakum now protects 2 members, 5.00 MB (5,000,000 bytes)." in text
    assert "It takes 1.15 MB (1,150,000 bytes), 23.0 % of what it protects." in text
    assert "shelf, RS(255,223) with the inner code [128,120,4]" in text
    assert "any one lost stretch of up to 711 kB (710,656 bytes) anywhere" in text
    assert "The source was read twice" in text


def test_protect_of_nothing(protected: ProtectResult) -> None:
    text = " ".join(protect_text(replace(protected, stream_bytes=0, guaranteed_burst=0)).split())
    assert "what it protects." not in text
    assert "It puts right any 65 flipped bits" in text


def test_description(described: Description) -> None:
    text = description_text(described)
    assert text.startswith("plates.oakum protects 4 files, 46 bytes.")
    assert "0640      10  1970-01-02 00:00:00  plates/a.tif" in text
    assert "plates/line\\x0abreak" in text
    assert "plates/odd\\xff" in text
    assert "plates/to -> a.tif" in text


@pytest.mark.parametrize(
    ("ns", "shown"),
    [
        (-(2**63), "1677-09-21 00:12:43"),  # what a signed 64-bit count of nanoseconds can hold (computed)
        (2**63 - 1, "2262-04-11 23:47:16"),
        (10**21, "1000000000000 s"),  # past year 9999
        (-(10**21), "-1000000000000 s"),
    ],
)
def test_times_at_and_past_the_calendar(described: Description, ns: int, shown: str) -> None:
    member = replace(described.members[0], modified_ns=ns)
    assert shown in description_text(replace(described, members=(member,)))


def test_columns_line_up_in_every_script() -> None:
    lines = table(("name", "n"), [("漢字", "1"), ("e\u0301", "22"), ("plain", "333")], left=(0,))
    assert len({width(line) for line in lines}) == 1
