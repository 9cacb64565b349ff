"""Random trials of the ranking of phases: how often it is right, and how often it is as sure as it should be.

    python tests/benchmarks/ranking_trials.py [--trials 500] [--seed 1] [--only TEXT]

A trial takes a random built-in phase along one of its eight most common zones and lets the strongest reflections be
seen up to a random limit, with intensities scrambled by a factor exp(N(0, 1)) and a quarter of them missing; forbidden
ones that double scattering reaches are there at times. Noise, a distortion, and a wrong scale are put on, and in some
cases peaks that belong to nothing. What is asked for is the phase among all 68. The pattern is that of the zone-axis
code; nothing of the ranking's own tables is used to make it. These trials share with the ranking the model of a perfect
lattice, so they flatter it: pictures with known crystals are the other half of the evidence.
"""

from __future__ import annotations

import argparse
import math
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from fringespan.crystal.library import built_in_phases
from fringespan.crystal.phase import Phase
from fringespan.crystal.zone import zone_arrays
from fringespan.ranking.hypotheses import Ranking, RankingSettings
from fringespan.ranking.observation import Observation, ObservedReflection
from fringespan.ranking.rank import rank_phases, rank_regions
from fringespan.ranking.zone_tables import zone_tables

PHASES = built_in_phases()


@dataclass(frozen=True)
class Case:
    """What a trial is like."""

    name: str
    peaks: int = 4
    scale: float = 0.02
    """The scale is off by a uniform amount up to this; the ranking is told the standard deviation of that."""
    noise: float = 0.002
    distortion: float = 0.002
    false_peaks: int = 0
    listed: int = 68
    truth_listed: bool = True
    zones: int = 8
    scale_told: float | None = None
    band_told: bool = True
    combinations_marked: bool = False
    """Peaks that are sums, differences or harmonics of stronger ones are marked so, as a measurement does."""
    settings: RankingSettings = field(default_factory=RankingSettings)


@dataclass(frozen=True)
class Truth:
    """What a trial was made from."""

    phase: Phase
    zone: tuple[int, int, int]
    scale: float
    hkl: tuple[tuple[int, int, int] | None, ...]


def common_zones(phase: Phase, number: int) -> list[tuple[int, int, int]]:
    """Return the zones with the shortest lattice vectors; of opposite ones one."""
    index = PHASES.index(phase)
    tables = zone_tables(PHASES)
    own = np.flatnonzero(tables.phase_of_zone == index)
    zones: list[tuple[int, int, int]] = []
    for row in tables.zone[own].tolist():
        if (-row[0], -row[1], -row[2]) not in zones:
            zones.append((row[0], row[1], row[2]))
    return zones[:number]


ZONES = {phase.id: common_zones(phase, 24) for phase in PHASES}


def make_trial(
    rng: np.random.Generator, case: Case, phase: Phase | None = None, scale: float | None = None
) -> tuple[Observation, Truth]:
    """Return one simulated observation with its truth."""
    while True:
        chosen = phase or PHASES[rng.integers(len(PHASES))]
        zones = ZONES[chosen.id][: case.zones]
        zone = zones[rng.integers(len(zones))]
        if rng.random() < 0.5:
            zone = (-zone[0], -zone[1], -zone[2])
        band = 1 / rng.uniform(0.95, 1.6)
        pattern = zone_arrays(chosen, zone, 0.095)
        g, hkl = pattern.g_per_angstrom, pattern.hkl
        half = (g.imag > 1e-9) | ((np.abs(g.imag) <= 1e-9) & (g.real > 0))
        is_seen = ~pattern.is_absent | (pattern.is_reachable & (rng.random(len(g)) < 0.3))
        rows = np.flatnonzero(half & is_seen & (np.abs(g) < band))
        intensity = np.where(pattern.is_absent[rows], 0.01, pattern.relative_intensity[rows])
        amplitude = np.sqrt(intensity * np.exp(rng.normal(0, 1, len(rows)))) * np.exp(
            -0.5 * (np.abs(g[rows]) / band) ** 2
        )
        amplitude[rng.random(len(rows)) < 0.25] = 0
        order = np.argsort(-amplitude)[: case.peaks]
        if len(order) < case.peaks or amplitude[order[-1]] <= 0:
            continue
        rows = rows[order]
        p = 10 * g[rows] * np.exp(2j * np.pi * rng.random())
        if np.max(np.abs((p * np.conj(p[0])).imag)) < 1e-6:
            continue  # one row of reflections spans no plane
        e0 = rng.uniform(-case.scale, case.scale) if scale is None else scale
        e1, e2 = rng.normal(0, case.distortion, 2)
        q = p * (1 + e0) + e1 * p.conj() + 1j * e2 * p.conj()
        names: list[tuple[int, int, int] | None] = [(int(h), int(k), int(m)) for h, k, m in hkl[rows]]
        source = list(order)
        if case.false_peaks:
            source += [-1] * case.false_peaks
            radius = 10 * band * np.sqrt(rng.uniform(0.1, 1, case.false_peaks))
            q = np.concatenate([q, radius * np.exp(1j * np.pi * rng.random(case.false_peaks))])
            names += [None] * case.false_peaks
            mixed = rng.permutation(len(q))
            q, names, source = q[mixed], [names[i] for i in mixed], [source[i] for i in mixed]
        strength = 100 * np.array([amplitude[j] if j >= 0 else rng.choice(amplitude[order]) for j in source])
        is_own = np.ones(len(q), dtype=bool)
        if case.combinations_marked:
            is_own = ~are_combinations(names)
        sigma = case.noise * np.abs(q)
        q = q + sigma * (rng.normal(size=len(q)) + 1j * rng.normal(size=len(q)))
        q = q * rng.choice([-1, 1], len(q))
        reflections = tuple(
            ObservedReflection(
                g_per_nm=(-float(v.imag), float(v.real)),
                covariance_per_nm2=((s * s, 0.0), (0.0, s * s)),
                signal_to_noise=float(strength[i]),
                role="reflection" if is_own[i] else "combination",
            )
            for i, (v, s) in enumerate(zip(q, sigma, strict=True))
        )
        told = case.scale / math.sqrt(3) if case.scale_told is None else case.scale_told
        limit = 10 * band if case.band_told else None
        made = Observation(reflections=reflections, pixel_size_relative_uncertainty=told, band_limit_per_nm=limit)
        return made, Truth(chosen, zone, e0, tuple(names))


def are_combinations(names: Sequence[tuple[int, int, int] | None]) -> np.ndarray:
    """Return which peaks are sums, differences or second harmonics of two stronger ones (strongest first)."""
    marked = np.zeros(len(names), dtype=bool)
    for k, name in enumerate(names):
        stronger = [np.array(other) for other in names[:k] if other is not None]
        if name is not None:
            marked[k] = any(
                np.array_equal(sa * a + sb * b, name)
                for i, a in enumerate(stronger)
                for b in stronger[i:]
                for sa in (1, -1)
                for sb in (1, -1)
            )
    return marked


def listed_phases(rng: np.random.Generator, case: Case, truth: Truth) -> tuple[Phase, ...]:
    """Return the phases that the ranking is asked to choose from."""
    if case.listed >= len(PHASES) and case.truth_listed:
        return PHASES
    others = tuple(phase for phase in PHASES if phase.id != truth.phase.id)
    if case.listed >= len(PHASES):
        return others
    number = case.listed - case.truth_listed
    picked = [others[i] for i in rng.choice(len(others), number, replace=False)]
    return tuple(([truth.phase] if case.truth_listed else []) + picked)


def same_zone(phase: Phase, one: Sequence[int], other: Sequence[int]) -> bool:
    """Whether two zones are equivalent under the Laue group."""
    images = phase.symmetry.laue_rotations @ np.array(one)
    return bool(np.any(np.all(images == np.array(other), axis=1)))


@dataclass
class Tally:
    """What came out of the trials of a case."""

    number: int = 0
    right: int = 0
    zone_right: int = 0
    said: float = 0.0
    covered: int = 0
    set_size: int = 0
    identified: int = 0
    identified_right: int = 0
    identified_twin: int = 0
    unlisted: float = 0.0
    seconds: list[float] = field(default_factory=list)
    verdicts: dict[str, int] = field(default_factory=dict)

    def add(self, ranking: Ranking, truth: Truth, seconds: float) -> None:
        """Count one trial."""
        self.number += 1
        self.seconds.append(seconds)
        self.verdicts[ranking.verdict] = self.verdicts.get(ranking.verdict, 0) + 1
        self.unlisted += ranking.unlisted_probability
        if not ranking.probability_of_phase:
            return
        best, probability = next(iter(ranking.probability_of_phase.items()))
        self.said += probability / sum(ranking.probability_of_phase.values())
        is_right = best == truth.phase.id
        self.right += is_right
        zone = ranking.matches[0].zone
        self.zone_right += is_right and zone is not None and same_zone(truth.phase, truth.zone, zone)
        self.covered += truth.phase.id in ranking.credible_phases
        self.set_size += len(ranking.credible_phases)
        if ranking.verdict == "identified":
            self.identified += 1
            self.identified_right += is_right


def run(case: Case, trials: int, seed: int) -> Tally:
    """Run the trials of a case."""
    rng = np.random.default_rng(seed)
    tally = Tally()
    for _ in range(trials):
        observation, truth = make_trial(rng, case)
        phases = listed_phases(rng, case, truth)
        zone_tables(phases)
        start = time.process_time()
        ranking = rank_phases(observation, phases, settings=case.settings)
        tally.add(ranking, truth, time.process_time() - start)
    return tally


def row(case: Case, tally: Tally, fft_seconds: float) -> str:
    """Return a line of the table."""
    n = tally.number
    cells = [
        f"{case.name:38s}",
        f"{case.peaks:2d}",
        f"{tally.right / n:6.3f}",
        f"{tally.zone_right / n:6.3f}",
        f"{tally.said / n:6.3f}",
        f"{tally.covered / n:6.3f}",
        f"{tally.set_size / n:5.2f}",
        f"{tally.identified / n:6.3f}",
        f"{tally.identified_right / tally.identified:6.3f}" if tally.identified else "     -",
        f"{tally.unlisted / n:6.3f}",
        f"{np.median(tally.seconds) / fft_seconds:6.3f}",
        f"{np.percentile(tally.seconds, 95) / fft_seconds:6.3f}",
    ]
    return "  ".join(cells)


HEAD = (
    f"{'case':38s}  pk   right    zone    said  in 95%    set  identi  right-   not in  time: median, p95\n"
    f"{'':38s}      phase           right     set         -fied  ly       list    over one 1024^2 FFT"
)


def cases() -> Iterator[Case]:
    """Yield the cases of the table."""
    base = Case("68 phases, scale 2 %")
    for peaks in (2, 3, 4, 6, 8):
        yield replace(base, peaks=peaks)
    exact = Case("68 phases, scale 0.1 %", scale=0.001)
    for peaks in (2, 4, 8):
        yield replace(exact, peaks=peaks)
    for noise in (0.0005, 0.005, 0.01):
        yield replace(base, name=f"noise {100 * noise:g} %", noise=noise)
    for false_peaks in (1, 2):
        for peaks in (4, 8):
            yield replace(base, name=f"{false_peaks} false", false_peaks=false_peaks, peaks=peaks)
    yield replace(base, name="distortion 0.5 %", distortion=0.005)
    for peaks in (4, 8):
        yield replace(base, name="sums and harmonics marked", combinations_marked=True, peaks=peaks)
        yield replace(base, name="band limit not told", band_told=False, peaks=peaks)
    yield replace(base, name="truth from 24 zones", zones=24)
    for peaks in (2, 4, 6, 8):
        yield replace(base, name="5 phases ticked, scale 2 %", listed=5, peaks=peaks)
    for peaks in (2, 4, 8):
        yield replace(base, name="phase known, scale 2 %", listed=1, peaks=peaks)
    yield replace(base, name="scale not stated, off by up to 10 %", scale=0.1, scale_told=0.06)
    for scale in (0.001, 0.02):
        for peaks in (2, 4, 6, 8):
            yield Case(f"truth left out, scale {100 * scale:g} %", scale=scale, peaks=peaks, truth_listed=False)
    for peaks in (2, 4):
        yield Case("truth not ticked, 5 others, 2 %", peaks=peaks, listed=5, truth_listed=False)


def several_regions(trials: int, seed: int) -> None:
    """Print what regions of one phase in one picture gain from each other."""
    for regions in (1, 2, 3):
        rng = np.random.default_rng(seed)
        right = covered = 0
        case = Case("", peaks=4)
        for _ in range(trials):
            phase = PHASES[rng.integers(len(PHASES))]
            scale = rng.uniform(-case.scale, case.scale)
            made = [make_trial(rng, case, phase, scale)[0] for _ in range(regions)]
            ranking = rank_regions(made, PHASES, shared="phase")[0]
            right += next(iter(ranking.probability_of_phase)) == phase.id
            covered += phase.id in ranking.credible_phases
        print(
            f"{regions} regions of 4 peaks, one phase, scale 2 %: right {right / trials:.3f}, "
            f"in 95 % set {covered / trials:.3f}"
        )


def reference_known(trials: int, seed: int) -> None:
    """Print how well the scale comes out when the phase is known."""
    for peaks in (3, 4, 8):
        rng = np.random.default_rng(seed)
        case = Case("", peaks=peaks, scale=0.1, noise=0.001, distortion=0.0005, scale_told=0.06)
        errors, pulls, missed = [], [], 0
        for _ in range(trials):
            observation, truth = make_trial(rng, case)
            matches = rank_phases(observation, [truth.phase], settings=RankingSettings(distortion=0.001)).matches
            if not matches:
                missed += 1
                continue
            best = matches[0]
            errors.append((best.scale or 0) - 1 - truth.scale)
            pulls.append(errors[-1] / (best.scale_uncertainty or 1))
        off = np.sort(np.abs(errors))
        rms = np.sqrt(np.mean(off[: int(0.99 * len(off))] ** 2))
        print(
            f"reference known, scale off by up to 10 %, {peaks} peaks: scale error median "
            f"{100 * np.median(off):.3f} %, rms without the worst 1 % {100 * rms:.3f} %, "
            f"none in {missed / trials:.3f}, beyond 1 % in {np.mean(off > 0.01):.3f}, "
            f"median |pull| {np.median(np.abs(pulls)):.2f} (Gaussian: 0.67)"
        )


def fft_time() -> float:
    """Return the CPU time of one FFT of a 1024 x 1024 picture, in this run on this machine."""
    picture = np.random.default_rng(0).normal(size=(1024, 1024))
    seconds = []
    for _ in range(9):
        start = time.process_time()
        np.fft.fft2(picture)
        seconds.append(time.process_time() - start)
    return float(np.median(seconds))


def main() -> None:
    """Run the trials asked for and print the table."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--trials", type=int, default=500)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--only", default="", help="run only the cases whose name holds this text")
    arguments = parser.parse_args()
    rank_phases(make_trial(np.random.default_rng(0), Case("warm-up"))[0], PHASES)
    fft_seconds = fft_time()
    print(f"{arguments.trials} trials a case, seed {arguments.seed}; one FFT {1000 * fft_seconds:.1f} ms\n{HEAD}")
    for case in cases():
        if arguments.only in case.name:
            print(row(case, run(case, arguments.trials, arguments.seed), fft_seconds), flush=True)
    if not arguments.only:
        several_regions(arguments.trials // 2, arguments.seed)
        reference_known(arguments.trials // 2, arguments.seed)


if __name__ == "__main__":
    main()
