"""Fit the weights, the intercept and the thresholds of the rules on stars whose truth is known.

``python -m screener.rules.calibrate --verdicts RUN --truth truth.json [--holdout 0.3] [--seed N]``

Whole stars are held out; nothing is chosen on them. On the others the weights of the rules marked
``fitted`` come from ``fitting``, then the thresholds from out-of-fold scores: ``planetary_above``
is the lowest one that keeps false planets per star at the target; ``likely_stellar_below`` is as
low as the share of signals that may be left ambiguous allows, and lower where planets called
stellar would exceed their target. The same inputs and seed give the same file.
"""

from __future__ import annotations

import hashlib
import math
from dataclasses import replace
from pathlib import Path

import click
import numpy as np

from screener.core import Array, InputFault, ScreenerError
from screener.rules.fitting import MIN_ACTIVE, Design, fit_weights, fold_of_stars
from screener.rules.performance import STRONG_SNR, limits_of, measure
from screener.rules.population import BoolArray, IntArray, Population, read_population
from screener.rules.reading import DEFAULT_FILE, load_rules
from screener.rules.report import Calibration, markdown, plain_table
from screener.rules.types import Rule, RuleSet, Thresholds

__all__ = ["calibrate", "choose_thresholds", "main", "weights_text"]

# a signal is not called planetary below odds of about 11:2, nor stellar above even odds, however
# few the stars that would forbid it (common practice, no source)
LEAST_PLANETARY, MOST_STELLAR = 1.7, 0.0
LEAST_GAP = 0.1


def _up(value: float) -> float:
    return math.floor(value * 1000.0 + 1.0) / 1000.0


def _down(value: float) -> float:
    return math.floor(value * 1000.0) / 1000.0


def choose_thresholds(
    population: Population,
    rules: RuleSet,
    score: Array,
    max_false: float,
    max_killed: float,
    max_ambiguous: float,
) -> tuple[Thresholds, list[str]]:
    """Thresholds that keep the two errors at their targets.

    Parameters
    ----------
    score : array, shape (n_signals,)
        Out-of-fold log-odds.
    max_false : float
        False planets per star.
    max_killed : float
        Share of the planets with snr of 7.5 or more called stellar.
    max_ambiguous : float
        Share of all signals that may be left ambiguous for the sake of planets.

    Returns
    -------
    thresholds, notes
    """
    limits, notes = limits_of(population, rules), []
    able = (population.label == 0) & ~limits["cap"] & ~limits["veto"]
    high = np.sort(score[able])[::-1]
    allowed = math.floor(max_false * len(population.stars) + 1e-9)
    planetary = max(_up(high[allowed]) if high.size > allowed else -math.inf, LEAST_PLANETARY)

    claimed = population.snr >= STRONG_SNR
    n_strong = int(np.count_nonzero(population.planets[:, 1] >= STRONG_SNR))
    vetoed = int(np.count_nonzero(claimed & limits["veto"]))
    allowed = math.floor(max_killed * n_strong + 1e-9) - vetoed
    if allowed < 0:
        notes.append(f"vetoes alone call {vetoed} of {n_strong} planets stellar: over the target")
        allowed = 0
    low = np.sort(score[claimed & ~limits["veto"] & ~limits["floor"]])
    stellar = min(
        _down(low[allowed]) if low.size > allowed else math.inf, MOST_STELLAR, planetary - LEAST_GAP
    )
    known = np.isfinite(score) & ~limits["veto"]
    undecided = known & ((score < planetary) | limits["cap"])
    free = np.sort(score[undecided & ~limits["floor"]])[::-1]
    held = int(np.count_nonzero(undecided & limits["floor"]))
    budget = math.floor(max_ambiguous * np.count_nonzero(np.isfinite(score))) - held
    if 0 < budget < free.size:
        stellar = min(stellar, _up(free[budget]))
    return Thresholds(planetary, stellar), notes


def _design(
    population: Population, rules: RuleSet, chosen: list[int], cost: float, fold: IntArray
) -> tuple[Design, BoolArray]:
    """The fit's view of the signals that are planets or not, and which signals those are."""
    use = population.label <= 1
    weights = np.array([r.weight for r in rules.rules])
    weights[chosen] = 0.0
    y = (population.label[use] == 1).astype(float)
    return (
        Design(
            x=population.share[use][:, chosen],
            sign=np.array([float(rules.rules[k].direction) for k in chosen]),
            offset=population.share[use] @ weights + population.shift[use],
            y=y,
            cost=np.where(y > 0.5, 1.0, cost),
            fold=fold[population.star[use]],
        ),
        use,
    )


def calibrate(
    population: Population,
    rules: RuleSet,
    *,
    holdout: float = 0.3,
    seed: int = 1,
    cost: float = 1.0,
    max_false: float = 0.005,
    max_killed: float = 0.003,
    max_ambiguous: float = 0.1,
    n_folds: int = 5,
) -> Calibration:
    """Fit weights, intercept and thresholds; see the module.

    Raises
    ------
    ScreenerError
        If there are too few planets or other signals to fit.
    """
    rng = np.random.default_rng(np.random.SeedSequence([seed, 5]))
    order = rng.permutation(len(population.stars))
    out = np.zeros(len(population.stars), dtype=bool)
    out[order[: round(holdout * len(population.stars))]] = True
    trained, held_out = population.of_stars(~out), population.of_stars(out)
    n_planets = int(np.count_nonzero(trained.label == 1))
    n_others = int(np.count_nonzero(trained.label == 0))
    if min(n_planets, n_others) < 2 * n_folds:
        raise ScreenerError(
            f"{n_planets} planets and {n_others} other signals are too few to fit; at least "
            f"{2 * n_folds} of each are needed. Give a run of more stars"
        )
    active = np.count_nonzero(trained.share[trained.label <= 1] > 0.0, axis=0)
    marked = [k for k, r in enumerate(rules.rules) if r.fitted]
    chosen = [k for k in marked if active[k] >= MIN_ACTIVE]
    fold = fold_of_stars(len(trained.stars), n_folds, rng)
    design, use = _design(trained, rules, chosen, cost, fold)
    fit = fit_weights(design)
    fresh = dict(zip(chosen, fit.weights.tolist(), strict=True))
    log_odds = round(math.log(n_planets / n_others), 4)
    new = replace(
        rules,
        log_odds=log_odds,
        intercept=round(fit.intercept - log_odds, 4),
        rules=tuple(_weighted(r, fresh.get(k)) for k, r in enumerate(rules.rules)),
    )
    score = np.full(use.size, np.nan)
    score[use] = fit.scores
    thresholds, notes = choose_thresholds(trained, new, score, max_false, max_killed, max_ambiguous)
    kept = tuple(rules.rules[k].id for k in marked if k not in chosen)
    if kept:
        notes.append(f"seen on fewer than {MIN_ACTIVE} signals, weight kept: {', '.join(kept)}")
    if population.failed:
        notes.append(f"{len(population.failed)} stars have no verdict that can be read")
    return Calibration(
        rules=replace(new, thresholds=thresholds),
        fit=fit,
        fitted=tuple(rules.rules[k].id for k in chosen),
        kept=kept,
        trained=trained,
        held_out=held_out,
        notes=tuple(notes),
    )


def _weighted(rule: Rule, weight: float | None) -> Rule:
    return rule if weight is None else replace(rule, weight=round(weight, 4) + 0.0)


def weights_text(result: Calibration, seed: int) -> str:
    """The weights file; the label changes whenever a number does."""
    rules = result.rules
    body = ["[prior]", f"log_odds = {rules.log_odds!r}", f"intercept = {rules.intercept!r}", ""]
    body += ["[thresholds]", f"planetary_above = {rules.thresholds.planetary_above!r}"]
    body += [f"likely_stellar_below = {rules.thresholds.likely_stellar_below!r}", "", "[weights]"]
    body += [f"{name} = {rules.rule(name).weight!r}" for name in result.fitted]
    digest = hashlib.sha256("\n".join(body).encode()).hexdigest()
    head = [
        "# Written by python -m screener.rules.calibrate; rules refer to these weights by id.",
        "",
        "[fit]",
        f'label = "fit-{digest[:8]}"',
        f'design_sha256 = "{rules.design_sha256}"',
        f"stars = {len(result.trained.stars)}",
        f"seed = {seed}",
        f'note = "{result.fit.kind}, strength {result.fit.strength:.3g}"',
        "",
    ]
    return "\n".join(head + body) + "\n"


def _write(path: Path, text: str) -> None:
    """Under its final name only once it is whole."""
    part = path.with_name(path.name + ".part")
    try:
        part.write_text(text, encoding="utf-8")
        part.replace(path)
    except OSError as error:
        part.unlink(missing_ok=True)
        problem = f"cannot be written ({error.strerror})"
        raise InputFault(str(path), problem, "Check the folder and its permissions") from None


def _rules_before(rule_file: Path, plain: RuleSet) -> RuleSet:
    """The rules as they grade now; with weights by judgement where a rule has come or gone."""
    try:
        return load_rules(rule_file)
    except ScreenerError:
        return plain


@click.command()
@click.option("--verdicts", type=click.Path(path_type=Path), required=True, help="Folder of a run.")
@click.option("--truth", type=click.Path(path_type=Path), required=True, help="Truth, JSON.")
@click.option("--rules", "rule_file", type=click.Path(path_type=Path), help="Rule file to fit.")
@click.option("--out", type=click.Path(path_type=Path), help="Weights file to write.")
@click.option("--report", type=click.Path(path_type=Path), help="Performance table, Markdown.")
@click.option("--holdout", type=click.FloatRange(0.0, 0.9), default=0.3, show_default=True)
@click.option("--seed", type=click.IntRange(0), default=1, show_default=True)
@click.option("--cost", type=click.FloatRange(0.01, 100.0), default=1.0, show_default=True,
              help="How much more a false planet costs than a lost one, in the fit.")  # fmt: skip
@click.option("--max-false", type=click.FloatRange(0.0, 1.0), default=0.005, show_default=True,
              help="False planets per star.")  # fmt: skip
@click.option("--max-killed", type=click.FloatRange(0.0, 1.0), default=0.003, show_default=True,
              help="Share of planets called stellar.")  # fmt: skip
@click.option("--max-ambiguous", type=click.FloatRange(0.0, 1.0), default=0.1, show_default=True,
              help="Share of signals that may stay ambiguous for the sake of planets.")  # fmt: skip
@click.option("--dry-run", is_flag=True, help="Write nothing.")
def main(
    verdicts: Path,
    truth: Path,
    rule_file: Path | None,
    out: Path | None,
    report: Path | None,
    holdout: float,
    seed: int,
    cost: float,
    max_false: float,
    max_killed: float,
    max_ambiguous: float,
    dry_run: bool,
) -> None:
    """Fit the weights of the rules on screened stars whose truth is known."""
    rule_file = rule_file or DEFAULT_FILE
    try:
        plain = load_rules(rule_file, use_weights=False)
        before = _rules_before(rule_file, plain)
        population = read_population(verdicts, truth, plain)
        result = calibrate(
            population, plain, holdout=holdout, seed=seed, cost=cost,
            max_false=max_false, max_killed=max_killed, max_ambiguous=max_ambiguous,
        )  # fmt: skip
        out = out or rule_file.with_name("weights.toml")
        text = markdown(result, before, seed)
        if not dry_run:
            _write(out, weights_text(result, seed))
            _write(report or out.with_name("performance.md"), text)
    except ScreenerError as error:
        raise click.ClickException(str(error)) from None
    click.echo(plain_table(text))
    if not dry_run:
        click.echo(f"Written: {out}")
    measured = measure(result.held_out, result.rules)
    click.echo(
        "FINAL " + " ".join(f"{k.replace(' ', '_')}={v.value:.4f}" for k, v in measured.items())
    )


if __name__ == "__main__":
    main()
