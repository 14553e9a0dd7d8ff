"""The JSON documents: the keys that programs rely on, and nothing that a parser would choke on."""

import base64
import json
from dataclasses import replace

from oakum.report.json import (
    check_document,
    description_document,
    dump,
    protect_document,
    unchecked_document,
)
from oakum.results import CheckResult, Description, MemberReport, MemberState, ProtectResult

TOTALS = [
    "bits_read",
    "bits_flipped",
    "bits_flipped_scattered",
    "bits_flipped_burst",
    "symbols_wrong",
    "words_corrected",
    "words_flagged",
    "bytes_erased",
    "blocks",
    "blocks_clean",
    "blocks_correctable",
    "blocks_uncorrectable",
]


def test_the_keys_that_stay(uncorrectable: CheckResult) -> None:
    document = json.loads(dump(check_document(uncorrectable)))
    assert document["schema"] == "oakum/1"
    assert document["command"] == "verify"
    assert document["outcome"] == "uncorrectable"
    assert document["code"] == {
        "name": "shelf",
        "outer": [255, 223],
        "inner": [128, 120, 4],
        "overhead": 0.219731,
        "guaranteed_flips": 65,
    }
    assert list(document["totals"]) == TOTALS
    assert document["blocks"][0] == {
        "window": 0,
        "block": 1,
        "state": "uncorrectable",
        "bits_flipped": None,
        "symbols_wrong": None,
        "bytes_erased": 700_000,
        "margin": None,
    }
    assert document["blocks"][1]["margin"] == -0.03
    first = document["members"][0]
    assert {key: first[key] for key in ("path", "size", "state", "bits_flipped")} == {
        "path": "plates/a.tif",
        "size": 3_000_000,
        "state": "uncorrectable",
        "bits_flipped": None,
    }
    assert first["lost"] == [{"offset": 4096, "length": 512}, {"offset": 9000, "length": 1}]
    sidecar = document["sidecar"]
    assert (sidecar["state"], sidecar["bits_flipped"], sidecar["symbols_wrong"]) == ("correctable", 12, 11)


def test_a_name_that_is_not_utf8_comes_with_its_bytes(correctable: CheckResult) -> None:
    raw = b"plates/\xff\xe9.tif"
    member = MemberReport(raw.decode(errors="surrogateescape"), 1, MemberState.ALTERED, 1)
    written = dump(check_document(replace(correctable, members=(member,))))
    shown = json.loads(written)["members"][0]
    assert shown["path"] == "plates/\\xff\\xe9.tif"
    assert base64.b64decode(shown["path_base64"]) == raw
    json.loads(written)["members"][0]["path"].encode()  # no lone surrogates


def test_documents_are_ascii(correctable: CheckResult) -> None:
    member = MemberReport("é\x1b\u202e", 1, MemberState.ALTERED, 1)
    written = dump(check_document(replace(correctable, members=(member,), notes=("ü",))))
    assert written.isascii()
    assert "\x1b" not in written
    assert json.loads(written)["members"][0]["path"] == "é\x1b\u202e"


def test_what_could_not_be_checked_is_null_and_not_zero() -> None:
    document = unchecked_document("verify", "plates", "no sidecar")
    assert document["outcome"] == "unchecked"
    assert document["totals"] is None and document["sidecar"] is None and document["code"] is None
    assert document["error"] == "no sidecar"


def test_protect(protected: ProtectResult) -> None:
    document = json.loads(dump(protect_document(protected)))
    assert document["command"] == "protect"
    assert document["sidecar"] == {"path": "plates.oakum"}
    assert (document["reads"], document["windows"], document["guaranteed_burst"]) == (2, 1, 710_656)


def test_description(described: Description) -> None:
    document = json.loads(dump(description_document(described)))
    assert document["members"][0]["sha256"] == "00" * 32
    assert document["members"][0]["mode"] == "0640"
    assert document["members"][4]["sha256"] is None
    assert document["members"][5]["link_target"] == "a.tif"


def test_a_code_without_inner_code(protected: ProtectResult) -> None:
    code = replace(protected.code, name="plain", inner=None)
    assert protect_document(replace(protected, code=code))["code"]["inner"] is None
