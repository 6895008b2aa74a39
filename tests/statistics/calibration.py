"""Do the intervals for pathways that nobody recorded cover as often as they say?

    python tests/statistics/calibration.py --json

Made-up worlds with known laws go through the fit itself. Well-specified worlds follow
the model; misfit worlds have heavy-tailed deviations, an interaction between types that
the model lacks, or counts that vary more than binomially. For every pathway that was not
recorded: is the true probability inside the interval, and how likely are the
connections among 100 new pairs, against three plain rules?
"""

from __future__ import annotations

import argparse
import json
import sys
import time
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

import numpy as np
from scipy.stats import binom

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
from statistics_worlds import KINDS, TYPES_N, make_world

from circuitgen.prediction.plain_rules import RULES, PlainRule
from circuitgen.spec import Recording
from circuitgen.wiring import Window, fit_pathways, show

NEW_PAIRS = 100


def _plain_rules(world) -> list[PlainRule]:
    """Return the three plain rules over a world's recordings."""
    sign = world.is_excitatory
    classes = [(sign[p[0]], sign[p[1]]) for w in world.windows for p in w.pathways]
    return [PlainRule(name, world.windows, classes) for name in RULES]


def _plain_scores(world, rules, pathway, histogram, k: int) -> list[float]:
    """Log scores of the three plain rules for k of the new pairs of a pathway."""
    fresh = Recording(pre_type="a", post_type="b", tested_n=NEW_PAIRS, connected_n=k)
    window = Window(fresh, {pathway: histogram})
    sign = tuple(world.is_excitatory[end] for end in pathway)
    return [float(np.log(rule.predict([], window, sign)[k])) for rule in rules]


def score_world(task: tuple[int, str, int]) -> dict[str, float]:
    """Fit one world and score its unrecorded pathways, every `step`-th by log score."""
    seed, kind, step = task
    world = make_world(seed, kind)
    random = np.random.default_rng(10_000 + seed)
    fit = fit_pathways(world.is_excitatory, world.home_layer, world.windows, seed=seed)
    rules = _plain_rules(world)
    recorded = {pathway for window in world.windows for pathway in window.pathways}
    inside, own, plain, errors = [], [], [], []
    for place, (pathway, histogram) in enumerate(world.histograms.items()):
        if pathway in recorded:
            continue
        code = pathway[0] * TYPES_N + pathway[1]
        p = show(fit.draws, {code: histogram}).probability
        true = world.true_p[pathway]
        low, low_50, middle, high_50, high = np.quantile(
            p, [0.05, 0.25, 0.5, 0.75, 0.95]
        )
        inside.append((low <= true <= high, low_50 <= true <= high_50))
        errors.append(abs(middle - true))
        if place % step == 0:
            k = int(random.binomial(NEW_PAIRS, true))
            own.append(float(np.log(binom.pmf(k, NEW_PAIRS, p).mean())))
            plain.append(_plain_scores(world, rules, pathway, histogram, k))
    cover = np.mean(inside, axis=0)
    return {
        "coverage_90": float(cover[0]),
        "coverage_50": float(cover[1]),
        "log_score": float(np.mean(own)),
        "log_scores_plain": np.mean(plain, axis=0).tolist(),
        "error_of_p": float(np.mean(errors)),
        "effective_points": fit.effective_points,
    }


def summarise(worlds: list[dict]) -> dict[str, float]:
    """Average the worlds of one kind; the gain is over the best rule of all of them."""
    plain = np.mean([world["log_scores_plain"] for world in worlds], axis=0)
    gains = [
        world["log_score"] - world["log_scores_plain"][plain.argmax()]
        for world in worlds
    ]
    names = ("coverage_90", "coverage_50", "log_score", "error_of_p", "effective_points")
    out = {name: float(np.mean([world[name] for world in worlds])) for name in names}
    return out | {
        "worlds": len(worlds),
        "log_score_plain": dict(zip(RULES, plain.tolist(), strict=True)),
        "gain": float(np.mean(gains)),
        "gain_error": float(np.std(gains) / np.sqrt(len(gains))),
        "coverage_90_error": float(
            np.std([world["coverage_90"] for world in worlds]) / np.sqrt(len(worlds))
        ),
    }


def calibrate(worlds_n: int, misfit_n: int, step: int = 1, workers: int = 2) -> dict:
    """Score worlds of every kind; return their summaries by kind."""
    out = {}
    with ProcessPoolExecutor(workers) as pool:
        for kind in KINDS:
            n = worlds_n if kind == KINDS[0] else misfit_n
            tasks = [(seed, kind, step) for seed in range(n)]
            out[kind] = summarise(list(pool.map(score_world, tasks)))
    return out


def main() -> None:
    """Run the whole calibration and print it."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--worlds", type=int, default=24)
    parser.add_argument("--misfit-worlds", type=int, default=14)
    parser.add_argument("--json", action="store_true")
    arguments = parser.parse_args()
    begin = time.monotonic()
    found = calibrate(arguments.worlds, arguments.misfit_worlds)
    seconds = round(time.monotonic() - begin, 1)
    if arguments.json:
        sys.stdout.write(json.dumps({"kinds": found, "seconds": seconds}) + "\n")
        return
    for kind, row in found.items():
        sys.stdout.write(
            f"{kind:<22}90 %: {row['coverage_90']:.3f}  50 %: {row['coverage_50']:.3f}"
            f"  gain {row['gain']:+.3f} +- {row['gain_error']:.3f}\n"
        )


if __name__ == "__main__":
    main()
