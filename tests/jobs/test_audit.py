"""audit: counts equal what was injected, causes are named, the ledger never stands in the way."""

from __future__ import annotations

import errno
import json
import os
import sqlite3
from pathlib import Path

import numpy as np
import pytest
from support import BadSectors, content, flipped_bits, overwritten, plant, rewrite, with_flips

from oakum import UsageError, protect, verify
from oakum.audits import AuditResult, Cause, TargetAudit
from oakum.cli.running import run
from oakum.jobs import audit as module
from oakum.jobs.audit import AuditOptions, audit
from oakum.ledger import Ledger
from oakum.report.audit_json import audit_document
from oakum.report.json import check_document
from oakum.report.text.audit import audit_text, summary_line
from oakum.results import Outcome, Totals

WINDOWED = "RS(60,40)+EH(128,120)"


def only(result: AuditResult) -> TargetAudit:
    (target,) = result.targets
    return target


def totals(target: TargetAudit) -> Totals:
    assert target.check is not None
    return target.check.totals


def test_an_intact_set_has_limits_and_no_findings(tmp_path: Path) -> None:
    folder = plant(tmp_path / "set", {"a": content(300_000), "b": content(7)})
    protect([folder])
    target = only(audit([folder]))
    assert (target.outcome, target.findings, target.reason) == (Outcome.INTACT, (), "")
    s = target.statistics
    assert s is not None
    assert (s.bits_read, s.flip_rate.count, s.burst_rate.count) == (8 * 300_007, 0, 0)
    # 3.688879 is the exact two-sided limit where nothing was seen (half of chi-squared at 0.975; computed).
    assert s.flip_rate.high == pytest.approx(3.688879 / (8 * 300_007), rel=1e-6)
    assert s.burst_rate.high == pytest.approx(3.688879 / 300_007, rel=1e-6)
    assert s.sidecar_bits_read == 8 * (tmp_path / "set.oakum").stat().st_size
    assert (s.lowest_margin, s.margin_at, s.coverage) == (1.0, None, 1.0)


@pytest.mark.parametrize("depth", [None, 4096])
def test_counts_equal_what_was_injected(tmp_path: Path, depth: int | None) -> None:
    before = {"a": content(500_000), "b": content(200_000, 2)}
    folder = plant(tmp_path / "set", before)
    sidecar = protect([folder], code=WINDOWED, depth=depth).sidecar
    scattered = {"a": with_flips(before["a"], 150, within=(0, 300_000)), "b": before["b"]}
    after = {"a": overwritten(scattered["a"], 400_001, 3000), "b": overwritten(before["b"], 9_000, 777)}
    for name, data in after.items():
        rewrite(folder / name, data)
    wrong = sidecar.read_bytes()
    rewrite(sidecar, with_flips(wrong, 25, within=(len(wrong) // 2, len(wrong))))
    target = only(audit([folder]))
    burst = sum(flipped_bits(after[n], scattered[n]) for n in before)
    t, s = totals(target), target.statistics
    assert s is not None and target.check is not None
    assert (t.bits_flipped_scattered, t.bits_flipped_burst) == (150, burst)
    assert t.bits_flipped == sum(flipped_bits(after[n], before[n]) for n in before)
    assert (s.flip_rate.count, s.burst_rate.count) == (150, 2)
    # The first or last bytes of a run may happen to be what they were.
    assert [abs(a - b) <= 3 for a, b in zip(s.burst_lengths, (777, 3000), strict=True)] == [True, True]
    assert sum(target.distribution.along) == t.bits_flipped
    assert sum(map(sum, target.distribution.positions)) == t.bits_flipped
    assert target.check.sidecar.bits_flipped == 25
    assert {f.cause for f in target.findings} == {Cause.RUNS, Cause.SCATTERED}


def burst_bits(before: bytes, after: bytes) -> int:
    """Flips in bursts as oakum(1) defines them: at least 32 bytes, more than a quarter of them wrong."""
    wrong = [i for i, (a, b) in enumerate(zip(before, after, strict=True)) if a != b]
    bits, cluster = 0, wrong[:1]
    for place in [*wrong[1:], 1 << 60]:
        if place - cluster[-1] > 16:
            length = cluster[-1] + 1 - cluster[0]
            if length >= 32 and 4 * len(cluster) > length:
                bits += sum((before[i] ^ after[i]).bit_count() for i in cluster)
            cluster = []
        cluster.append(place)
    return bits


@pytest.mark.parametrize("seed", range(12))
def test_counts_in_scenarios_of_all_kinds(tmp_path: Path, seed: int) -> None:
    """Flips, runs of all lengths, and damage to the sidecar, drawn from a seed; all within capacity."""
    rng = np.random.default_rng([55, seed])
    before = content(int(rng.integers(70_000, 600_000)), seed)
    (tmp_path / "x").write_bytes(before)
    depth = None if seed % 2 else 4096
    sidecar = protect([tmp_path / "x"], code=("shelf", WINDOWED)[seed % 3 == 0], depth=depth).sidecar
    after = with_flips(before, int(rng.integers(1, 200)), seed)
    for _ in range(int(rng.integers(0, 4))):
        length = int(rng.choice([8, 33, 200, 4096, len(before) // 100]))
        after = overwritten(after, int(rng.integers(len(before))), length, seed)
    rewrite(tmp_path / "x", after)
    body = sidecar.read_bytes()
    damaged = with_flips(body, int(rng.integers(0, 60)), seed, within=(len(body) // 3, len(body)))
    rewrite(sidecar, damaged)
    target = only(audit([tmp_path / "x"]))
    t = totals(target)
    assert target.outcome is Outcome.CORRECTABLE
    assert t.bits_flipped == flipped_bits(before, after)
    assert t.bits_flipped_burst == burst_bits(before, after)
    assert t.symbols_wrong == sum(a != b for a, b in zip(before, after, strict=True))
    assert target.check is not None and target.check.sidecar.bits_flipped == flipped_bits(body, damaged)
    right, flips = (np.frombuffer(d, np.uint8) for d in (before, after))
    flips = flips ^ right
    rows = [np.concatenate([f, np.zeros(-len(f) % 8, np.uint8)]) for f in (flips & ~right, flips & right)]
    counts = tuple(
        tuple(np.unpackbits(row, bitorder="little").reshape(-1, 64).sum(axis=0).tolist()) for row in rows
    )
    assert target.distribution.positions == counts


def test_it_says_the_same_as_verify(tmp_path: Path) -> None:
    folder = plant(tmp_path / "set", {"a": content(500_000), "b": content(1000, 2)})
    protect([folder])
    rewrite(folder / "a", overwritten(with_flips(content(500_000), 40), 70_000, 9000))
    (folder / "b").unlink()
    check, target = verify(folder), only(audit([folder]))
    assert target.check is not None
    assert (target.check.totals, target.check.blocks) == (check.totals, check.blocks)
    assert (target.check.members, target.check.outcome) == (check.members, check.outcome)
    document = audit_document(audit([folder]))["targets"][0]
    assert check_document(check).keys() <= document.keys()
    json.dumps(document, allow_nan=False)


# -- causes, from real files ---------------------------------------------------------------------------

LINES = b"".join(b"reading %d at the gauge\n" % i for i in range(400))


def changed(tmp_path: Path, before: bytes, after: bytes, beside: int = 200_000) -> TargetAudit:
    """The audit of a set in which one file became another; the set is large enough to bear it."""
    folder = plant(tmp_path / "set", {"a": content(beside, 8), "f": before, "z": content(beside, 9)})
    protect([folder])
    rewrite(folder / "f", after)
    return only(audit([folder]))


@pytest.mark.parametrize(
    ("cause", "after"),
    [
        (Cause.LINE_ENDS, LINES.replace(b"\n", b"\r\n")),
        (Cause.CUT_SHORT, LINES[:8192]),
        (Cause.REWRITTEN, content(len(LINES), 77)),
        (Cause.FILLED_END, LINES[:6000] + bytes(len(LINES) - 6000)),
        (Cause.FILLED_INSIDE, LINES[:2000] + b"\xff" * 512 + LINES[2512:]),
        (Cause.PAST_OFFSET, LINES[:5001] + content(len(LINES) - 5001, 78)),
        (Cause.ALIGNED, LINES[:4096] + content(2048, 79) + LINES[6144:]),
        (Cause.SCATTERED, with_flips(LINES, 12)),
    ],
)
def test_a_cause_is_named_from_the_files(tmp_path: Path, cause: Cause, after: bytes) -> None:
    target = changed(tmp_path, LINES, after)
    assert target.outcome is Outcome.CORRECTABLE
    assert target.findings[0].cause is cause, target.findings
    assert target.findings[0].members == ("set/f",)


@pytest.mark.parametrize(
    ("cause", "after"),
    [
        (Cause.LINE_ENDS, (LINES * 60).replace(b"\n", b"\r\n")),
        (Cause.REWRITTEN, content(len(LINES) * 60, 77)),
        (Cause.FILLED_END, LINES * 10 + bytes(len(LINES) * 50)),
    ],
)
def test_a_cause_is_named_where_nothing_can_be_corrected(tmp_path: Path, cause: Cause, after: bytes) -> None:
    target = changed(tmp_path, LINES * 60, after, beside=5000)
    assert target.outcome is Outcome.UNCORRECTABLE
    assert target.findings[0].cause is cause, target.findings
    s = target.statistics
    assert s is not None and s.lowest_margin is None
    assert s.flip_rate.exposure < s.bits_read


RANDOM = content(9000, 31)


def leaky(data: bytes) -> bytes:
    """A bit in each of 150 random bytes becomes 0, where it was not."""
    out = bytearray(data)
    for place in np.random.default_rng(12).choice(len(data), 150, replace=False).tolist():
        out[place] &= ~(1 << place % 7)
    return bytes(out)


@pytest.mark.parametrize(
    ("cause", "before", "after"),
    [
        (Cause.HIGH_BIT, "fährt über die Brücke\n".encode() * 300, None),
        (Cause.STUCK_BIT, RANDOM, bytes(b | 8 if i % 8 == 5 else b for i, b in enumerate(RANDOM))),
        (Cause.DIRECTION, RANDOM, leaky(RANDOM)),
        (
            Cause.PERIOD,
            RANDOM,
            bytes(b ^ 1 << i // 277 % 8 if i % 277 == 13 else b for i, b in enumerate(RANDOM)),
        ),
    ],
)
def test_a_cause_in_single_bits(tmp_path: Path, cause: Cause, before: bytes, after: bytes | None) -> None:
    target = changed(tmp_path, before, after or bytes(b & 0x7F for b in before))
    assert target.outcome is Outcome.CORRECTABLE
    assert target.findings[0].cause is cause, target.findings


def test_read_errors(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    folder = plant(tmp_path / "set", {"a": content(400_000)})
    protect([folder])
    with monkeypatch.context() as patch:
        BadSectors({folder / "a": [(8192, 8192 + 512), (40_960, 49_152)]}).install(patch)
        target = only(audit([folder]))
    s = target.statistics
    assert s is not None and (s.read_errors, totals(target).bytes_erased) == (2, 512 + 8192)
    assert [f.cause for f in target.findings] == [Cause.UNREADABLE]
    assert "8,704 bytes at 2 places" in target.findings[0].evidence


def test_readings_that_differ(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A place that is wrong at first and right when it is read again speaks of the path to the medium."""
    folder = plant(tmp_path / "set", {"a": content(400_000)})
    protect([folder])
    inode, true, seen = (folder / "a").stat().st_ino, os.preadv, []

    def once(fd: int, buffers: list[memoryview], offset: int) -> int:
        got = true(fd, buffers, offset)
        if os.fstat(fd).st_ino == inode and offset <= 70_000 < offset + got and not seen:
            seen.append(offset)
            buffers[0][70_000 - offset] ^= 0x10
        return got

    monkeypatch.setattr(os, "preadv", once)
    target = only(audit([folder]))
    s = target.statistics
    assert seen and s is not None and s.readings_differ == 1
    assert (s.flip_rate.count, [f.cause for f in target.findings]) == (0, [Cause.UNSTEADY])


# -- several targets, and what cannot be checked --------------------------------------------------------


def test_a_medium_that_is_not_there_is_not_checked(tmp_path: Path) -> None:
    folder = plant(tmp_path / "set", {"a": content(300_000)})
    sidecar = protect([folder]).sidecar
    here = plant(tmp_path / "here", {"a": content(3000)})
    protect([here])
    (folder / "a").rename(tmp_path / "away")
    result = audit([folder, here, tmp_path / "nothing"], AuditOptions(ledger=tmp_path / "l"))
    assert [t.outcome for t in result.targets] == [Outcome.UNCHECKED, Outcome.INTACT, Outcome.UNCHECKED]
    assert "mounted" in result.targets[0].reason and sidecar.exists()
    assert result.outcome is Outcome.UNCHECKED
    assert "1 whole, 2 not checked" in summary_line(result)
    with Ledger(tmp_path / "l", write=False) as ledger:
        (entry,) = ledger.entries()
    assert [row["bits_read"] for row in entry.targets] == [None, 24_000, None]


@pytest.mark.parametrize(
    ("outcomes", "gravest"),
    [
        ((Outcome.INTACT, Outcome.CORRECTABLE), Outcome.CORRECTABLE),
        ((Outcome.CORRECTABLE, Outcome.UNCHECKED), Outcome.UNCHECKED),
        ((Outcome.UNCHECKED, Outcome.UNCORRECTABLE), Outcome.UNCORRECTABLE),
        ((Outcome.INTACT,), Outcome.INTACT),
    ],
)
def test_the_gravest_outcome_counts(outcomes: tuple[Outcome, ...], gravest: Outcome) -> None:
    result = audit([])
    targets = tuple(TargetAudit(Path("x"), outcome) for outcome in outcomes)
    assert AuditResult(result.begun, "", targets, 0.0).outcome is gravest


# -- the ledger ----------------------------------------------------------------------------------------


def damaged_set(tmp_path: Path) -> Path:
    folder = plant(tmp_path / "set", {"a": content(300_000)})
    protect([folder])
    rewrite(folder / "a", with_flips(content(300_000), 20))
    return folder


def test_an_entry_in_the_ledger(tmp_path: Path) -> None:
    folder = damaged_set(tmp_path)
    options = AuditOptions(ledger=tmp_path / "l", medium="BD-1", counters=(("c", 2.0),))
    result = audit([folder], options)
    assert (result.ledger, result.ledger_note) == (tmp_path / "l", "")
    assert result.trend is not None and result.trend.medium == "BD-1"
    with Ledger(tmp_path / "l", write=False) as ledger:
        (entry,) = ledger.entries("BD-1")
    (row,) = entry.targets
    assert (entry.audit["finished"] is not None, entry.counters) == (True, {"c": 2.0})
    assert (row["bits_flipped_scattered"], row["flip_exposure"], row["coverage"]) == (20, 2_400_000, 1.0)
    assert json.loads(str(row["findings"]))[0]["cause"] == Cause.SCATTERED


def foreign(path: Path) -> None:
    path.write_bytes(b"something else" * 100)


def newer(path: Path) -> None:
    with Ledger(path, write=True):
        pass
    with sqlite3.connect(path) as db:
        db.execute("PRAGMA user_version = 99")
    db.close()


def a_folder(path: Path) -> None:
    path.mkdir()


@pytest.mark.parametrize(
    ("spoil", "why"), [(foreign, "not a ledger"), (newer, "newer oakum"), (a_folder, "ledger")]
)
def test_trouble_with_the_ledger_does_not_hide_the_result(
    tmp_path: Path, spoil: object, why: str, capsys: pytest.CaptureFixture[str]
) -> None:
    folder = damaged_set(tmp_path)
    spoil(tmp_path / "l")  # type: ignore[operator]
    result = audit([folder], AuditOptions(ledger=tmp_path / "l"))
    assert (result.outcome, result.ledger) == (Outcome.CORRECTABLE, None)
    assert why in result.ledger_note
    assert run(["audit", str(folder), "--ledger", str(tmp_path / "l")]) == 10
    out, err = capsys.readouterr()
    assert "Every byte can be put right" in out
    assert "no entry in the ledger" in err


def test_a_disk_that_fills_up_during_the_audit(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    folder = damaged_set(tmp_path)

    def full(*_: object) -> int:
        raise sqlite3.OperationalError("database or disk is full")

    with Ledger(tmp_path / "l", write=True):
        monkeypatch.setattr(Ledger, "_insert", full)
        result = audit([folder], AuditOptions(ledger=tmp_path / "l"))
    assert (result.outcome, result.ledger) == (Outcome.CORRECTABLE, None)
    assert "is full" in result.ledger_note


def test_an_audit_that_was_stopped_is_resumed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    folder = damaged_set(tmp_path)
    other = plant(tmp_path / "other", {"a": content(5000)})
    protect([other])
    true, options = module.audit_target, AuditOptions(ledger=tmp_path / "l", resume=True)

    def stop_at_the_second(target: Path, *rest: object) -> TargetAudit:
        if target == other:
            raise KeyboardInterrupt
        return true(target, *rest)  # type: ignore[arg-type]

    with monkeypatch.context() as patch:
        patch.setattr(module, "audit_target", stop_at_the_second)
        with pytest.raises(KeyboardInterrupt):
            audit([folder, other], options)
    first, second = audit([folder, other], options).targets
    assert (first.earlier, first.outcome, first.check) == (True, Outcome.CORRECTABLE, None)
    assert (second.earlier, second.outcome) == (False, Outcome.INTACT)
    with Ledger(tmp_path / "l", write=False) as ledger:
        (entry,) = ledger.entries()
    assert len(entry.targets) == 2 and entry.audit["finished"]
    assert not any(t.earlier for t in audit([folder, other], options).targets)


# -- samples -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("depth", [None, 4096])
def test_a_sample_sees_its_share_and_counts_it_exactly(tmp_path: Path, depth: int | None) -> None:
    """Thin code, so that small sets have many blocks."""
    size = 40 * 4096 * 60
    data = content(size)
    folder = plant(tmp_path / "set", {"a": data})
    protect([folder], code=WINDOWED, depth=depth)
    damaged = with_flips(data, 600)
    rewrite(folder / "a", damaged)
    places = np.flatnonzero(np.frombuffer(data, np.uint8) != np.frombuffer(damaged, np.uint8))
    target = only(audit([folder], AuditOptions(share=0.2, seed=5)))
    again = only(audit([folder], AuditOptions(share=0.2, seed=5)))
    another = only(audit([folder], AuditOptions(share=0.2, seed=6)))
    s = target.statistics
    assert s is not None and 0.1 < s.coverage < 0.3
    assert s.bits_read == round(8 * size * s.coverage)
    assert (again.statistics, again.distribution) == (target.statistics, target.distribution)
    assert another.distribution != target.distribution
    assert 0.4 * 600 * s.coverage < s.flip_rate.count < 2 * 600 * s.coverage
    # What is counted is what was injected in the blocks that were read.
    assert target.check is not None
    strips = places // 4096 % 60 if depth is None else places // (40 * 4096)
    seen = {b.block if depth is None else b.window for b in target.check.blocks}
    bits = np.bitwise_count(np.frombuffer(data, np.uint8)[places] ^ np.frombuffer(damaged, np.uint8)[places])
    assert s.flip_rate.count == bits[np.isin(strips, list(seen))].sum()
    assert any("SHA-256 was not compared" in note for note in target.check.notes)


def test_windows_that_are_left_out_are_not_decoded(tmp_path: Path) -> None:
    """The last window is so small that it has no digests; unless it is chosen nothing is said of it."""
    size = 40 * 4096 * 9 + 1000
    folder = plant(tmp_path / "set", {"a": content(size)})
    protect([folder], code=WINDOWED, depth=4096)
    rewrite(folder / "a", content(size)[:-500] + bytes(500))
    seen = set()
    for seed in range(12):
        target = only(audit([folder], AuditOptions(share=0.1, seed=seed)))
        s = target.statistics
        assert s is not None and s.bits_read in (8 * 40 * 4096, 8000)
        assert (target.outcome is Outcome.CORRECTABLE) == (s.bits_read == 8000)
        seen.add(s.bits_read)
    assert seen == {8 * 40 * 4096, 8000}


@pytest.mark.parametrize("share", [0.0, -1.0, 1.5])
def test_no_such_share(share: float) -> None:
    with pytest.raises(UsageError, match="share"):
        audit([], AuditOptions(share=share))


def test_one_sidecar_belongs_to_one_target(tmp_path: Path) -> None:
    with pytest.raises(UsageError, match="--sidecar"):
        audit([tmp_path, tmp_path], AuditOptions(sidecar=tmp_path))


# -- the command ---------------------------------------------------------------------------------------


def test_the_command(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    folder = damaged_set(tmp_path)
    ledger = ["--ledger", str(tmp_path / "l"), "--medium-id", "BD-1"]
    assert run(["audit", str(folder), *ledger, "--quiet"]) == 10
    out = capsys.readouterr().out
    assert out.count("\n") == 1 and out.startswith("1 target: 1 damaged and correctable; 20 scattered flips")
    assert run(["audit", str(folder), *ledger, "--json", "--sample", "100%", "--counter", "r=1"]) == 10
    document = json.loads(capsys.readouterr().out)
    assert (document["command"], document["outcome"], document["counters"]) == (
        "audit",
        "correctable",
        {"r": 1.0},
    )
    assert document["targets"][0]["statistics"]["flip_rate"]["count"] == 20
    assert document["trend"]["medium_id"] == "BD-1"
    assert run(["audit", str(tmp_path / "nothing"), *ledger]) == 30
    assert "was not checked" in capsys.readouterr().out
    for wrong in (["--sample", "0%"], ["--sample", "x"], ["--counter", "r"], ["--counter", "r=nan"]):
        assert run(["audit", str(folder), *ledger, *wrong]) == 2


def test_names_cannot_reach_the_terminal(tmp_path: Path) -> None:
    folder = plant(tmp_path / "se\x1bt", {"a\x1b[31m": content(9000)})
    protect([folder])
    rewrite(folder / "a\x1b[31m", content(9000, 5))
    assert "\x1b" not in audit_text(audit([folder]))


def test_errors_of_the_system_are_not_checked(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    folder = damaged_set(tmp_path)

    def fail(*_: object) -> TargetAudit:
        raise OSError(errno.ENOMEM, "Cannot allocate memory")

    monkeypatch.setattr(module, "audit_target", fail)
    target = only(audit([folder]))
    assert (target.outcome, "cannot allocate memory" in target.reason) == (Outcome.UNCHECKED, True)
