"""Measure the attribution engine on the invented bay: detection, false effects, causes, onsets.

Run by hand: `python -m tests.benchmarks.bench_attribution [--seeds N] [--only NAME] [--nights N]
[--alpha P]`.
Each seed and scenario is watched night by night (05:30) from the night after the fault on, with the
effects of the night before handed back in; `nothing` is watched over all nights after the baseline.
Prints one row a scenario: detected by the next night, by the second, by the last; false effects a
night; effects per fault; form right; first suspect right (as named, and with its aliases); onset
interval covering; seconds a night.
"""

from __future__ import annotations

import argparse
import time
from dataclasses import dataclass, field

import numpy as np

from spc.stats.attribution import AttributionOptions, Effect, Evidence, Level, attribute
from tests.stats.attribution_bay import CHARACTERISTICS, DAY, LEVEL_NAMES, Bay, Fault

PASS = 5.5 / 24.0


def scenarios(rng: np.random.Generator) -> dict[str, tuple[Fault, ...]]:
    """Return the faults of each scenario, placed at random."""
    t = float(rng.integers(13, 18)) + rng.uniform(0.25, 0.45)
    track, cup = f"T{rng.integers(1, 4)}", f"C{rng.integers(1, 5)}"
    scanner = f"S{rng.integers(1, 4)}"
    cup_of = {"tool": track, "module": cup}
    coat_cup = {"coat.tool": track, "coat.module": cup}
    batch = int(t / 2.5) + 1
    sign = float(rng.choice([-1.0, 1.0]))
    film, width = (0, "mean"), (1, "mean")
    out = {
        "nothing": (),
        "batch": (
            Fault({"resist_batch": f"B{batch}"}, {film: -2.5 * sign, width: 1.0 * sign},
                  start=batch * 2.5),
        ),
        "cup-drift": (Fault(coat_cup, {film: 4.0 * sign}, start=t, ramp=4.0, form="drift"),),
        "cup-shift": (Fault(coat_cup, {film: 2.0 * sign}, start=t),),
        "track-shift": (Fault({"coat.tool": track}, {film: 2.0 * sign, width: sign}, start=t),),
        "small": (Fault({"coat.tool": track}, {film: 1.0 * sign}, start=t),),
        "spike": (
            Fault({"coat.tool": track}, {film: 5.0 * sign, width: 2.5 * sign}, start=t, lots=1,
                  form="spike"),
        ),
        "spread": (
            Fault(coat_cup, {(0, "within-wafer"): 2.5, (0, "map-distance"): 1.2}, start=t,
                  form="spread"),
        ),
        "bowl": (
            Fault(cup_of, {(0, "bowl"): 2.5 * sign, (0, "map-distance"): 2.0}, start=t,
                  form="map"),
        ),
        "gauge": (Fault({"gauge": "FB"}, {film: 2.0 * sign}, start=t),),
        "reticle": (Fault({"reticle": "R2"}, {width: 2.5 * sign}, start=t),),
        "overlay-scale": (Fault({"tool": scanner}, {(2, "scale-x"): 2.5 * sign}, start=t),),
        "in-field": (Fault({"tool": scanner}, {(2, "field-rotation-x"): 2.0 * sign}, start=t),),
        "two": (
            Fault(coat_cup, {film: 2.5 * sign}, start=t),
            Fault({"tool": scanner}, {(2, "scale-x"): 2.5}, start=t + 0.2),
        ),
    }  # fmt: skip
    return out


@dataclass
class Tally:
    """What was counted in one scenario."""

    faults: int = 0
    by_night: list[int] = field(default_factory=lambda: [0] * 10)
    nights: int = 0
    false: int = 0
    strong_false: int = 0
    effects: int = 0
    form: int = 0
    named: int = 0
    aliased: int = 0
    covered: int = 0
    found: int = 0
    seconds: float = 0.0


def truth_of(evidence: Evidence, bay: Bay, fault: Fault) -> tuple[np.ndarray, set[tuple[int, str]]]:
    """Return the lots a fault touched and its (characteristic, statistic) pairs."""
    time_ = evidence.t_measure if fault.measured else evidence.t_process
    if evidence.t_level is not None and not fault.measured:
        own = evidence.t_level[:, evidence.factors.index(next(iter(fault.where)))]
        time_ = np.where(np.isfinite(own), own, time_)
    on = (time_ >= fault.start * DAY) & (time_ < fault.end * DAY)
    for name, level in fault.where.items():
        j = evidence.factors.index(name)
        on &= evidence.levels[:, j] == LEVEL_NAMES[name].index(level)
    lots = np.unique(evidence.lot[on])
    if fault.lots:
        film = evidence.characteristic[evidence.series] == 0
        lots = np.unique(evidence.lot[on & film])[: fault.lots]
    return lots, set(fault.moves)


def matches(effect: Effect, lots: np.ndarray, moves: set[tuple[int, str]]) -> bool:
    moved = {(s.characteristic, s.statistic) for s in effect.sizes if s.moved}
    moved.add((effect.sizes[effect.leading].characteristic, effect.sizes[effect.leading].statistic))
    return bool(moved & moves) and float(np.isin(effect.lots, lots).mean()) >= 0.5


def same_level(level: Level, fault: Fault) -> bool:
    names = tuple(n.removeprefix("coat.") for n in level.factors)
    wanted = {k.removeprefix("coat."): v for k, v in fault.where.items()}
    return dict(zip(names, level.names, strict=True)) == wanted


def watch(
    tally: Tally, bay: Bay, faults: tuple[Fault, ...], seed: int, nights: int, alpha: float
) -> None:
    """Watch one seed of a scenario night by night."""
    evidence = bay.with_faults(*faults).simulate(seed)
    truths = [truth_of(evidence, bay, f) for f in faults]
    begin = max((f.start for f in faults), default=bay.baseline_days + 3.0)
    night = np.ceil(begin - PASS) + PASS
    last = night + nights - 1 if faults else bay.days - 1.0
    previous: tuple[Effect, ...] = ()
    seen: dict[int, int] = {}
    i = 0
    while night <= last + 1e-9:
        options = AttributionOptions(alpha=alpha, since=(night - 1.0) * DAY)
        clock = time.process_time()
        effects = attribute(evidence, options, night * DAY, previous)
        tally.seconds += time.process_time() - clock
        tally.nights += 1
        for effect in effects:
            hit = [k for k, t in enumerate(truths) if matches(effect, *t)]
            for k in hit:
                seen.setdefault(k, i)
            if not hit and effect.previous is None:
                tally.false += 1
                tally.strong_false += effect.p_adjusted <= 0.02
        previous = effects
        night, i = night + 1.0, i + 1
    tally.faults += len(faults)
    for at in seen.values():
        tally.by_night[at] += 1
    for k, (fault, truth) in enumerate(zip(faults, truths, strict=True)):
        mine = [e for e in previous if matches(e, *truth)]
        tally.effects += len(mine)
        if not mine or k not in seen:
            continue
        best = mine[0]
        tally.found += 1
        tally.form += best.form == fault.form
        tally.named += same_level(best.level, fault)
        tally.aliased += any(same_level(x, fault) for x in (best.level, *best.aliased_with))
        start = fault.start * DAY
        if fault.lots:
            start = best.onset.estimate if best.lots[0] == truth[0][0] else start
        tally.covered += best.onset.earliest <= start <= best.onset.latest


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--seeds", type=int, default=20)
    parser.add_argument("--first", type=int, default=0)
    parser.add_argument("--only", default="")
    parser.add_argument("--nights", type=int, default=4)
    parser.add_argument("--alpha", type=float, default=0.1)
    args = parser.parse_args()
    bay = Bay()
    assert len(CHARACTERISTICS) == 3
    print("scenario        faults night1 night2   last  false/night  p<=.02  per-fault   form "
          "named  alias  onset  s/night")  # fmt: skip
    for name in scenarios(np.random.default_rng(0)):
        if args.only and name not in args.only.split(","):
            continue
        tally = Tally()
        for seed in range(args.first, args.first + args.seeds):
            faults = scenarios(np.random.default_rng(seed))[name]
            watch(tally, bay, faults, seed, args.nights, args.alpha)
        n, found = max(tally.faults, 1), max(tally.found, 1)
        cumulative = np.cumsum(tally.by_night) / n
        print(
            f"{name:15s} {tally.faults:6d} {cumulative[0]:6.2f} {cumulative[1]:6.2f} "
            f"{cumulative[-1]:6.2f} {tally.false / max(tally.nights, 1):12.3f} "
            f"{tally.strong_false / max(tally.nights, 1):7.3f} {tally.effects / found:10.2f} "
            f"{tally.form / found:6.2f} {tally.named / found:6.2f} {tally.aliased / found:6.2f} "
            f"{tally.covered / found:6.2f} {tally.seconds / max(tally.nights, 1):8.2f}",
            flush=True,
        )


if __name__ == "__main__":
    main()
