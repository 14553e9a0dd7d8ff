"""What plan and rehearse are told about the damage: a preset of a medium, and figures that override it."""

from __future__ import annotations

from dataclasses import dataclass

from oakum.channel import Channel, Medium, Runs, medium_named
from oakum.errors import UsageError
from oakum.results import Assumption

GIVEN = "given"
SECTOR = 4096
BURST = 64 << 10
CLUSTER_WITHIN = 100
"""Sectors within which those of a cluster lie."""

Lengths = tuple[tuple[int, float], ...]


@dataclass(frozen=True)
class Wishes:
    """The figures of one run; None where nothing was said.

    Rates are per year: `flip_rate` the chance of a bit to flip, `bursts_per_tb` and `sectors_per_tb` events
    per terabyte. `bursts` is an exact number instead; a burst length alone means one burst. `lost_share` is a
    part of the data, from 0 to 1.
    """

    medium: str | None = None
    flip_rate: float | None = None
    burst_length: Lengths | None = None
    bursts_per_tb: float | None = None
    bursts: int | None = None
    sector_size: int | None = None
    sectors_per_tb: float | None = None
    sector_cluster: float | None = None
    lost_share: float | None = None
    years: float | None = None
    spare_sidecar: bool = False

    def channel(self) -> tuple[Channel, tuple[Assumption, ...]]:
        """The channel that is meant, and what it rests on. Raises UsageError for what makes no sense."""
        preset = medium_named(self.medium) if self.medium is not None else None
        said: list[Assumption] = []
        flip_rate = self._flip_rate(preset, said)
        runs = (*self._bursts(preset, said), *self._sectors(preset, said))
        if self.lost_share:
            said.append(_given(f"{self.lost_share:.3g} of the data goes missing in one piece"))
        years = 1.0 if self.years is None else self.years
        channel = Channel(flip_rate, runs, self.lost_share or 0.0, years, self.spare_sidecar)
        if channel.harmless and self.years is not None:
            raise UsageError(
                "a period needs a rate; add --flip-rate, --bursts-per-tb, --sectors-per-tb or --medium"
            )
        if channel.harmless:
            raise UsageError(
                "nothing is said about the damage; give --medium, --flip-rate, --burst-length or --lost-share"
            )
        if self.spare_sidecar:
            said.append(_given("the sidecar is kept where nothing of this happens to it"))
        else:
            said.append(
                Assumption("the sidecar ages like the data", "--spare-sidecar says otherwise", "assumed")
            )
        figures = preset.figures if preset is not None else ()
        return channel, (*figures, *said)

    def _flip_rate(self, preset: Medium | None, said: list[Assumption]) -> float:
        if self.flip_rate is None:
            return preset.flip_rate if preset is not None else 0.0
        per = " and year" if self.years is not None else ""
        said.append(_given(f"a chance of {self.flip_rate:.3g} to flip for each bit{per}, independently"))
        return self.flip_rate

    def _bursts(self, preset: Medium | None, said: list[Assumption]) -> tuple[Runs, ...]:
        kept = tuple(r for r in preset.runs if r.readable) if preset is not None else ()
        if self.burst_length is None and self.bursts_per_tb is None and self.bursts is None:
            return kept
        if self.bursts is not None and self.bursts_per_tb is not None:
            raise UsageError("--bursts and --bursts-per-tb exclude each other; give a number or a rate")
        lengths = self.burst_length or (kept[0].lengths if kept else ((BURST, 1.0),))
        count, rate = self.bursts or 0, self.bursts_per_tb or 0.0
        if self.bursts is None and self.bursts_per_tb is None:
            count, rate = (0, kept[0].per_tb_year) if kept else (1, 0.0)
        runs = Runs(lengths, per_tb_year=rate, count=count)
        often = f"{count:,} in all" if count else f"{rate:.3g} per TB and year"
        said.append(_given(f"bursts of random bytes, {_shown(runs)} long, {often}"))
        return (runs,)

    def _sectors(self, preset: Medium | None, said: list[Assumption]) -> tuple[Runs, ...]:
        kept = tuple(r for r in preset.runs if not r.readable) if preset is not None else ()
        if self.sector_size is None and self.sectors_per_tb is None and self.sector_cluster is None:
            return kept
        base = kept[0] if kept else Runs(((SECTOR, 1.0),), readable=False)
        if not kept and self.sectors_per_tb is None:
            raise UsageError("sectors need a rate; add --sectors-per-tb")
        lengths = base.lengths if self.sector_size is None else ((self.sector_size, 1.0),)
        rate = base.per_tb_year if self.sectors_per_tb is None else self.sectors_per_tb
        cluster = base.cluster if self.sector_cluster is None else self.sector_cluster
        runs = Runs(
            lengths, rate, readable=False, cluster=cluster, within=CLUSTER_WITHIN * max(n for n, _ in lengths)
        )
        said.append(
            _given(
                f"sectors of {_shown(runs)} unreadable, {rate:.3g} per TB and year, "
                f"in clusters of {cluster:g} on average"
            )
        )
        return (runs,)


def _given(text: str) -> Assumption:
    return Assumption(text, "the command line", GIVEN)


def _shown(runs: Runs) -> str:
    if len(runs.shares) == 1:
        return f"{runs.shares[0][0]:,} bytes"
    return ", ".join(f"{length:,} bytes ({share:.3g})" for length, share in runs.shares)
