"""How right the budget of what closes the eye is: seeded links with several defects, against the same streams without one of them.

    python tools/budget_check.py                 each defect alone, then 30 mixtures of three
    python tools/budget_check.py --mixtures 300  as many mixtures
    python tools/budget_check.py --jobs 2        in so many processes

The truth of a part is the opening at the target error rate of the stream that lacks its cause, less that of the whole stream. Causes
at random (noise, jitter in time and phase) close the eye together, by the root of their variances' sum: their truth is what the stream
that lacks all of them gains, shared by variance, each told from the stream that lacks it alone. Nothing is asserted.
"""

import argparse
import json
import sys
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from dsp.block import Block
from dsp.chain import Chain, ChainOptions
from dsp.figures import Figures
from dsp.link import Link
from dsp.pulses import Pulse
from dsp.reading import Reading
from dsp.transmitter import TransmitSpec, transmit

BAUD = 9600.0
RANDOM = ("noise", "timing", "phase")
CAUSES = ("isi", *RANDOM, "iq", "clipping")
LEAD = 5.0  # points by which the largest cause must lead to be asked for
SCHEMES = (  # name, samples a symbol, pulse, scale of what the scheme bears
    ("pam2", 4.0, "rrc:0.35", 1.0),
    ("pam2", 16.0, "rect", 1.0),
    ("pam4", 4.0, "rrc:0.5", 1 / 3),
    ("qpsk", 4.0, "rrc:0.35", 1.0),
    ("qpsk", 4.0, "rrc:0.22", 1.0),
    ("16qam", 4.0, "rrc:0.25", 1 / 3),
    ("64qam", 4.0, "rrc:0.35", 1 / 7),
)


@dataclass(frozen=True)
class Defect:
    """One thing wrong with a stream: the budget's cause and what it changes in the specification."""

    cause: str
    name: str
    changes: dict[str, Any]


def draw(cause: str, scheme: tuple[str, float, str, float], random: np.random.Generator) -> Defect:
    """A defect of that cause, of a size that takes some 5 to 40 points."""
    name, _, pulse, scale = scheme
    size = random.uniform(0.15, 1.0)
    iq = name not in ("pam2", "pam4")
    if cause == "noise":
        sigma = 0.085 * size
        # a deviation of sigma of half a spacing, of levels whose energy is that of the scheme
        energy = {"pam2": 1.0, "pam4": 5.0, "qpsk": 2.0, "16qam": 10.0, "64qam": 42.0}[name]
        rails = 2.0 if iq else 1.0
        return Defect(cause, "noise", {"snr_db": 10 * np.log10(energy / (rails * sigma**2))})
    if cause == "timing":
        if random.random() < 0.5:
            return Defect(cause, "white jitter", {"jitter_rms_ui": 0.055 * size * scale})
        return Defect(
            cause, "sine jitter",
            {"jitter_sine_ui": 0.075 * size * scale, "jitter_sine_hz": BAUD * random.uniform(0.01, 0.03)},
        )  # fmt: skip
    if cause == "phase":
        return Defect(cause, "phase noise", {"phase_noise_deg": 0.9 * size * scale})
    if cause == "iq":
        return Defect(cause, "I/Q skew", {"iq_skew_deg": 38.0 * size * scale * random.choice((-1.0, 1.0))})
    if cause == "clipping":
        kind = str(random.choice(("soft", "hard")))
        low, high = {"soft": (1.3, 0.6), "hard": (0.8, 0.6)}[kind]
        if scale < 0.9:
            low, high = {"soft": (2.5, 1.2), "hard": (0.85, 0.72)}[kind]
        return Defect(cause, f"{kind} clipping", {"clipping": kind, "clip_at": low + size * (high - low)})
    if pulse == "rect" and random.random() < 0.5:
        return Defect(cause, "low-pass", {"t_over_tau": float(np.exp(np.log(3.5) - size * np.log(2.2)))})
    delay = random.uniform(0.4, 3.0)
    gain = complex(0.3 * size * scale)
    if iq:
        gain *= np.exp(2j * np.pi * random.random())
    else:
        gain *= random.choice((-1.0, 1.0))
    return Defect(cause, "echo", {"echoes": ((delay, gain),)})


@dataclass(frozen=True)
class Case:
    """A link and its defects."""

    scheme: tuple[str, float, str, float]
    defects: tuple[Defect, ...]
    seed: int
    symbols: int
    target: float

    def spec(self, without: frozenset[str] = frozenset()) -> TransmitSpec:
        """The stream, but for the defects of some causes."""
        name, sps, pulse, _ = self.scheme
        plain = TransmitSpec(
            scheme=name,
            symbol_rate_hz=BAUD,
            sample_rate_hz=BAUD * sps,
            pulse=Pulse.parse(pulse),
            symbols=self.symbols,
            seed=self.seed,
            snr_db=70.0,
        )
        changes: dict[str, Any] = {}
        for defect in self.defects:
            if defect.cause not in without:
                changes |= defect.changes
        # the gain must not follow the defects, or a clipper would meet another signal
        return replace(plain, gain=transmit(replace(plain, symbols=10)).gain, **changes)


def measured(spec: TransmitSpec, target: float) -> tuple[Reading | None, Any]:
    """The reading of a whole stream, and its residual's random variance."""
    sent = transmit(spec)
    link = Link(spec.link_scheme, spec.sample_rate_hz, spec.symbol_rate_hz, spec.pulse)
    chain = Chain(link, complex_in=bool(np.iscomplexobj(sent.samples)), options=ChainOptions(target_ber=target))
    chain.push(Block(sent.samples, 0))
    chain.finish()
    if chain.total is None:
        return None, None
    figures = Figures(chain.total, chain.context())
    reading = replace(figures.reading(whole=False), budget=figures.budget())
    split = figures._split
    return reading, float(split.random.max()) if split is not None else None


def judge(case: Case) -> dict[str, Any]:
    """Parts and truth of one case."""
    whole, variance = measured(case.spec(), case.target)
    result: dict[str, Any] = {
        "scheme": case.scheme[0], "pulse": case.scheme[2], "seed": case.seed,
        "defects": {d.name: {k: str(v) for k, v in d.changes.items()} for d in case.defects},
    }  # fmt: skip
    if whole is None or whole.opening_at_ber_pct is None or whole.budget is None:
        return result | {"failed": "not measured"}
    parts = {cause: getattr(whole.budget, f"{cause}_pct") or 0.0 for cause in (*CAUSES, "levels")}
    # the transmitter's levels are even: what compresses them is the clipper
    alone, truth, variances = {}, {}, {}
    for defect in case.defects:
        without, rest = measured(case.spec(frozenset({defect.cause})), case.target)
        if without is None or without.opening_at_ber_pct is None:
            return result | {"failed": f"not measured without {defect.name}"}
        alone[defect.cause] = without.opening_at_ber_pct - whole.opening_at_ber_pct
        variances[defect.cause] = max((variance or 0.0) - (rest or 0.0), 0.0)
    truth = dict(alone)
    at_random = [cause for cause in alone if cause in RANDOM]
    if len(at_random) > 1:
        without, _ = measured(case.spec(frozenset(at_random)), case.target)
        if without is None or without.opening_at_ber_pct is None:
            return result | {"failed": "not measured without random causes"}
        together = without.opening_at_ber_pct - whole.opening_at_ber_pct
        total = sum(variances[cause] for cause in at_random)
        for cause in at_random:
            truth[cause] = together * variances[cause] / max(total, 1e-18)
    errors = {cause: parts[cause] - truth[cause] for cause in truth}
    order = sorted(truth.values(), reverse=True)
    leads = len(order) < 2 or order[0] - order[1] >= LEAD
    named = max(CAUSES, key=lambda cause: parts[cause])
    return result | {
        "opening_at_ber_pct": whole.opening_at_ber_pct, "parts": parts, "truth": truth, "alone": alone, "errors": errors,
        "unexplained": whole.budget.unexplained_pct, "leads": leads, "right": named == max(truth, key=lambda c: truth[c]),
        "others": max(abs(parts[cause]) for cause in (*CAUSES, "levels") if cause not in truth), "verdict": whole.verdict,
    }  # fmt: skip


def cases(mixtures: int, *, symbols: int, target: float, alone: bool) -> list[Case]:
    """Each defect alone for every scheme that can have it, then mixtures of three causes."""
    result = []
    if alone:
        for number, scheme in enumerate(SCHEMES):
            for place, cause in enumerate(_possible(scheme)):
                random = np.random.default_rng(1000 + 20 * number + place)
                result.append(Case(scheme, (draw(cause, scheme, random),), 50 + number, symbols, target))
    for number in range(mixtures):
        random = np.random.default_rng(number)
        scheme = SCHEMES[int(random.integers(len(SCHEMES)))]
        chosen = random.choice(_possible(scheme), size=3, replace=False)
        result.append(Case(scheme, tuple(draw(str(c), scheme, random) for c in chosen), 100 + number, symbols, target))
    return result


def _possible(scheme: tuple[str, float, str, float]) -> list[str]:
    complex_link = scheme[0] not in ("pam2", "pam4")
    return [cause for cause in CAUSES if complex_link or cause not in ("phase", "iq")]


def show(results: list[dict[str, Any]], *, verbose: bool) -> None:
    """A line a case that is off, and the totals."""
    for kind, some in (
        ("alone", [r for r in results if len(r["defects"]) == 1]),
        ("mixtures", [r for r in results if len(r["defects"]) > 1]),
    ):
        good = [r for r in some if "failed" not in r]
        if not some:
            continue
        for r in some:
            if "failed" in r:
                print("FAILED", r["failed"], r["scheme"], r["defects"])
                continue
            off = max(abs(e) for e in r["errors"].values())
            if verbose or off > 3.0 or (r["leads"] and not r["right"]):
                told = " ".join(f"{c} {r['parts'][c]:.1f}/{r['truth'][c]:.1f}/{r['alone'][c]:.1f}" for c in r["truth"])
                print(
                    f"{r['scheme']:>6} {r['pulse']:<8} seed {r['seed']:<4} open {r['opening_at_ber_pct']:6.1f}  {told}  "
                    f"unexpl {r['unexplained']:.1f} others {r['others']:.1f} {'' if r['right'] else 'WRONG'} "
                    f"{list(r['defects'].items())}"
                )
        errors = np.asarray([e for r in good for e in r["errors"].values()])
        leading = [r for r in good if r["leads"]]
        right = sum(r["right"] for r in leading)
        print(
            f"{kind}: {len(good)} of {len(some)} measured; parts within 3 points: {100 * np.mean(np.abs(errors) <= 3):.1f} %"
            f" (rms {np.sqrt(np.mean(errors**2)):.2f}, bias {errors.mean():.2f}); largest cause right: {right} of {len(leading)}"
        )


def main(arguments: list[str]) -> int:
    """Run the check; returns the exit status."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--mixtures", type=int, default=30, help="how many mixtures of three causes (30)")
    parser.add_argument("--symbols", type=int, default=40_000, help="length of each stream (40000)")
    parser.add_argument("--target", type=float, default=1e-6, help="error rate at which openings are taken (1e-6)")
    parser.add_argument("--jobs", type=int, default=1, help="processes (1)")
    parser.add_argument("--no-alone", action="store_true", help="mixtures only")
    parser.add_argument("--json", action="store_true", help="one JSON document on standard output")
    parser.add_argument("--verbose", action="store_true", help="a line for every case")
    options = parser.parse_args(arguments)
    todo = cases(options.mixtures, symbols=options.symbols, target=options.target, alone=not options.no_alone)
    if options.jobs > 1:
        with ProcessPoolExecutor(options.jobs) as pool:
            results = list(pool.map(judge, todo))
    else:
        results = [judge(case) for case in todo]
    if options.json:
        print(json.dumps(results, indent=1))
    else:
        show(results, verbose=options.verbose)
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
