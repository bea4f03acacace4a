"""The campaign: how soon health finds what is wrong with an emulated sensor, and how often it finds what is not.

    python tools/bench/campaign [--set tuning|judging] [--only WORDS] [--scale F] [--days N] [--jobs N] [--json FILE]

Each fault of the graded set runs at several strengths, on units drawn at random, at ten kinds of sites, at a cadence of
6 s and of 1 s, with and without a twin; then the ordinary weather set runs with nothing wrong. Printed are, per fault:
cases, how many were found within the bar, how long it took (median, 90 %, worst), and how many opened a wrong finding
of fan or optics kind instead or beside; then false findings per sensor-year, each with its evidence; then how often
findings were true at each confidence that they opened with.

Seeds of the two sets are apart. The judging set is run once, for the record: whoever tunes a check uses the other one.
`--scale 0.2` runs a fifth of the cases. Results depend on nothing but code and seed. Exits 1 when a bar is missed.
"""

import argparse
import json
import sys
from collections import Counter, defaultdict
from concurrent.futures import ProcessPoolExecutor, as_completed
from dataclasses import asdict, dataclass
from pathlib import Path
from statistics import median
from time import perf_counter
from typing import NamedTuple

sys.path.insert(0, str(Path(__file__).parent))

from cases import KINDS, Draw, ordinary
from driving import Found, through_health, through_pipeline
from weathers import WEATHERS

from motesim.plan import SitePlan
from motesim.site import Site
from motesim.weather import DAY_S

SEEDS = {"tuning": 1, "judging": 7}
# Findings that send somebody to a site with a spare unit: what weather must never do.
PHYSICAL = ("fan-stopped", "fan-weak", "fan-surging", "optics-fouled", "floor-raised", "light-leak", "twin-disagrees")
FAILURES = ("fan-stopped", "output-frozen", "channels-inconsistent", "frames-missing", "sensor-error")
BAR_STOPPED, BAR_FALSE, BAR_WRONG = 0.99, 1.0, 0.05
INTERVAL_S = 60.0


class Stretch(NamedTuple):
    """What was found in a stretch of ordinary weather."""

    weather: str
    period_s: float
    sensor_years: float
    found: list[Found]


@dataclass(frozen=True, slots=True)
class Outcome:
    """What became of one case. `took_s` is None when it was not found at all; `wrong` are other physical findings, and
    `early` those before the fault began. `opened` has the confidence of each such finding and whether it was true."""

    kind: str
    label: str
    period_s: float
    number: int
    took_s: float | None
    bar_s: float
    wrong: tuple[str, ...]
    early: tuple[str, ...]
    told: str
    opened: tuple[tuple[float, bool], ...]

    @property
    def found(self) -> bool:
        return self.took_s is not None and self.took_s <= self.bar_s


def run_case(kind: str, number: int, period_s: float, seed: int) -> Outcome:
    case = KINDS[kind].make(Draw(kind, number, period_s, seed))
    events = [f for f in (through_pipeline if case.by_bytes else through_health)(case.plan) if f.sensor == "own"]
    onset, bar = case.onset, case.bar_s
    if case.code == "counts-saturated":  # due by the end of the interval that has the first censored count
        onset, bar = _saturated(case.plan) or case.onset, INTERVAL_S
        onset -= onset % INTERVAL_S
    right = [f for f in events if f.code == case.code and f.at >= onset - 1.0]
    early = [f.code for f in events if f.at < _begins(case.plan, onset) and f.code in PHYSICAL]
    late = [f for f in events if f.at >= _begins(case.plan, onset)]
    wrong = [f.code for f in late if f.code in PHYSICAL and f.code != case.code]
    took = right[0].at - onset if right else None
    if any(f.code == case.code and f.at < onset < f.closed for f in (events if case.kind == "fog" else late)):
        took = 0.0  # found while it was still below its limit; a humid night is one that fog comes in
    judged = [f for f in events if f.code in (*PHYSICAL, case.code)]
    opened = tuple([(f.confidence, f in late and f.code == case.code) for f in judged])
    told = right[0].evidence if right else "; ".join(f"{f.code} {f.evidence}" for f in late)
    return Outcome(kind, case.label, period_s, number, took, bar, tuple(wrong), tuple(early), told[:300], opened)


def _begins(plan: SitePlan, onset: float) -> float:
    """The first moment of the fault, which for one that grows is before its onset."""
    return min([fault.at for fault in plan.sensors[0].faults], default=onset)


def _saturated(plan: SitePlan) -> float | None:
    """When the first count was printed at its top."""
    for block in Site(plan).observed("own"):
        top = (block.printed.columns.counts >= 65_535).any(axis=1)
        if top.any():
            return float(block.printed.times[top.argmax()])
    return None


def run_ordinary(number: int, period_s: float, seed: int, days: float, *, twinned: bool) -> Stretch:
    plan = ordinary(number, period_s, seed, days, twinned=twinned)
    return Stretch(plan.name, period_s, days * len(plan.sensors) / 365.25, through_health(plan))


def main() -> int:
    parser = argparse.ArgumentParser(description="how soon faults are found, and how often nothing is")
    parser.add_argument("--set", choices=SEEDS, default="tuning")
    parser.add_argument(
        "--only", default="", help="kinds whose name holds these words; 'ordinary' for the weather alone"
    )
    parser.add_argument("--scale", type=float, default=1.0, help="share of the cases to run")
    parser.add_argument("--cadence", type=float, choices=(6.0, 1.0), help="only cases at this cadence, s")
    parser.add_argument("--days", type=float, default=60.0, help="of each stretch of ordinary weather")
    parser.add_argument("--stretches", type=int, default=20, help="of ordinary weather at 6 s, half of them twinned")
    parser.add_argument("--jobs", type=int, default=2)
    parser.add_argument("--json", type=Path, help="write every outcome there")
    options = parser.parse_args()
    seed, begin = SEEDS[options.set], perf_counter()
    outcomes: list[Outcome] = []
    weather: list[Stretch] = []
    with ProcessPoolExecutor(options.jobs) as pool:
        jobs = []
        for name, kind in KINDS.items():
            if options.only in name:
                for period_s, cases in ((6.0, kind.slow), (1.0, kind.quick)):
                    if options.cadence not in (None, period_s):
                        continue
                    numbers = range(max(round(cases * options.scale), 1))
                    jobs += [pool.submit(run_case, name, number, period_s, seed) for number in numbers]
        if options.only in "ordinary weather":
            n = max(round(options.stretches * options.scale), 1)
            jobs += [pool.submit(run_ordinary, i, 6.0, seed, options.days, twinned=i // 10 % 2 == 1) for i in range(n)]
            days = options.days / 9.0  # at 1 s a day is six times the work
            at_1_s = range(max(n // 2, 1))
            jobs += [pool.submit(run_ordinary, i, 1.0, seed, days, twinned=i // 10 % 2 == 1) for i in at_1_s]
        for done, job in enumerate(as_completed(jobs), 1):
            result = job.result()
            if isinstance(result, Outcome):
                outcomes.append(result)
            else:
                weather.append(result)
            if sys.stderr.isatty() or done % 50 == 0:
                print(f"\r{done} of {len(jobs)}, {perf_counter() - begin:.0f} s", end="", file=sys.stderr, flush=True)
    print(file=sys.stderr)
    good = report(outcomes)
    good = report_weather(weather) and good
    report_confidence(outcomes, weather)
    if options.json:
        rows = [asdict(o) for o in outcomes]
        false = [[name, period, asdict(f)] for name, period, _, found in weather for f in found]
        options.json.write_text(json.dumps({"cases": rows, "ordinary": false}, indent=1) + "\n", encoding="utf-8")
    print(f"\n{options.set} seeds, {len(outcomes)} cases, {perf_counter() - begin:.0f} s with {options.jobs} processes")
    return 0 if good else 1


def report(outcomes: list[Outcome]) -> bool:
    if not outcomes:
        return True
    columns = "".join(f"{word:>9}" for word in ("in time", "median", "90 %", "worst"))
    print(f"{'fault':22}{'cadence':>8}{'cases':>7}{columns}{'bar':>8}{'wrong':>7}")
    good = True
    groups: dict[tuple[str, float, str], list[Outcome]] = defaultdict(list)
    for o in outcomes:
        groups[o.kind, o.period_s, ""].append(o)
        if o.label and len({x.label for x in outcomes if x.kind == o.kind}) <= 3:
            groups[o.kind, o.period_s, o.label].append(o)
    for kind in KINDS:
        for period_s in (6.0, 1.0):
            keys = sorted(k for k in groups if k[0] == kind and k[1] == period_s)
            for key in keys:
                row = groups[key]
                good = _line(key, row) and good
    wrong = [o for o in outcomes if o.wrong]
    share = len(wrong) / len(outcomes)
    print(f"wrong attribution: {len(wrong)} of {len(outcomes)} cases, {share:.1%} (bar {BAR_WRONG:.0%})")
    for (kind, code), n in Counter((o.kind, c) for o in wrong for c in set(o.wrong)).most_common():
        print(f"  {kind}: {code} in {n}")
    early = Counter((o.kind, c) for o in outcomes for c in set(o.early))
    if early:
        print("opened before the fault began: " + ", ".join(f"{k}: {c} in {n}" for (k, c), n in early.most_common()))
    return good and share < BAR_WRONG


def _line(key: tuple[str, float, str], row: list[Outcome]) -> bool:
    kind, period_s, label = key
    took = sorted(o.took_s for o in row if o.took_s is not None)
    share = sum(o.found for o in row) / len(row)
    unit, per = _unit(row[0].bar_s)
    times = [median(took), took[min(int(0.9 * len(took)), len(took) - 1)], took[-1]] if took else []
    shown = "".join(f"{t / per:9.1f}" for t in times) or f"{'-':>9}" * 3
    name = f"  {label}" if label else kind
    wrong = sum(bool(o.wrong) for o in row)
    print(f"{name:22}{period_s:6.0f} s{len(row):7}{share:9.1%}{shown}{row[0].bar_s / per:6.1f} {unit}{wrong:6}")
    return bool(label) or share >= (BAR_STOPPED if kind.startswith("fan stopped") else 1.0)


def _unit(bar_s: float) -> tuple[str, float]:
    return ("d", DAY_S) if bar_s >= DAY_S else ("h", 3600.0) if bar_s >= 3600.0 else ("m", 60.0)


def report_weather(rows: list[Stretch]) -> bool:
    if not rows:
        return True
    years = sum(y for _, _, y, _ in rows)
    print(f"\nordinary weather, {years:.1f} sensor-years at {len(WEATHERS)} kinds of sites")
    physical = [(name, period, f) for name, period, _, found in rows for f in found if f.code in PHYSICAL]
    failures = [(name, period, f) for name, period, _, found in rows for f in found if f.code in FAILURES]
    print(f"  of fan and optics kind: {len(physical)}, {len(physical) / years:.2f} a sensor-year (bar {BAR_FALSE:g})")
    print(f"  of category F: {len(failures)} (bar 0)")
    for name, period, f in [*physical, *[x for x in failures if x not in physical]]:
        print(f"    {name}, {period:g} s, {f.sensor}: {f.code} {f.confidence:.2f}: {f.evidence[:150]}")
    others = Counter(f.code for _, _, _, found in rows for f in found if f.code not in (*PHYSICAL, *FAILURES))
    if others:
        print("  others: " + ", ".join(f"{code} {n}" for code, n in others.most_common()))
    return len(physical) / years < BAR_FALSE and not failures


def report_confidence(outcomes: list[Outcome], weather: list[Stretch]) -> None:
    """A finding opened at 0.9 should be true nine times in ten, over faults and ordinary weather together."""
    opened = [item for o in outcomes for item in o.opened]
    opened += [(f.confidence, False) for stretch in weather for f in stretch.found if f.code in PHYSICAL]
    if not opened:
        return
    print("\nconfidence at opening: how many, and the share that was true")
    for low, high in ((0.0, 0.6), (0.6, 0.75), (0.75, 0.85), (0.85, 0.95), (0.95, 1.01)):
        inside = [true for confidence, true in opened if low <= confidence < high]
        if inside:
            print(f"  {low:.2f} to {min(high, 1.0):.2f}: {len(inside):5}, {sum(inside) / len(inside):.1%} true")


if __name__ == "__main__":
    sys.exit(main())
