"""The page of a lot: each number's spread, and which modules lie outside it."""

from collections import Counter

import numpy as np

from hybridtrack.calibration.batch import OUTLIER_Z, PERCENTILES, BatchEntry, Spread, common_lens_model
from hybridtrack.report.figures import INK, SERIES, drawing, finished
from hybridtrack.report.page import BLINK_CAUTION, Figure, Page, Section, Table

SHOWN_Z = 8.0


def spread_table(found: list[Spread]) -> Table:
    """Each number's percentiles, spread, stated deviation and outliers."""
    rows = tuple(
        (
            spread.name,
            str(len(spread.values)),
            *(f"{value:.6g}" for value in spread.percentiles[::2]),
            f"{spread.robust_sigma:.3g}",
            "" if spread.stated_sigma is None else f"{spread.stated_sigma:.3g}",
            ", ".join(spread.outliers[:3]) + (f" and {more} more" if (more := len(spread.outliers) - 3) > 0 else ""),
        )
        for spread in found
    )
    marks = tuple(f"{p} %" for p in PERCENTILES[::2])
    return Table(("number", "modules", *marks, "spread", "stated", "outliers"), rows, prose=(7,))


def entry_table(entries: list[BatchEntry], found: list[Spread]) -> Table:
    """Each recording: what became of it, and in how many numbers it lies outside."""
    outside = Counter(name for spread in found for name in spread.outliers)
    rows = tuple(
        (
            entry.name,
            entry.module,
            entry.serial or "",
            entry.state,
            str(outside[entry.name]) if entry.numbers else "",
            entry.refusal or "; ".join(entry.failed_limits),
        )
        for entry in entries
    )
    return Table(("recording", "module", "serial", "state", "outlier in", "why"), rows, prose=(1, 2, 3, 5))


def spread_figure(found: list[Spread]) -> Figure:
    """Every module in every number, as robust z."""
    caption = (
        f"Each dot is a module: how far its number lies from the lot's median, in robust deviations. Beyond "
        f"{OUTLIER_Z:g} it is an outlier and named; what lies beyond {SHOWN_Z:g} is drawn at the edge."
    )
    with drawing("spread", caption, wide=True, height_in=0.9 + 0.24 * len(found)) as sheet:
        axes = sheet.axes
        axes.axvspan(-OUTLIER_Z, OUTLIER_Z, color=SERIES[0], alpha=0.10, lw=0)
        axes.axvline(0, color=INK, lw=0.8)
        for place, spread in enumerate(found):
            z = np.clip(spread.z, -SHOWN_Z, SHOWN_Z)
            far = np.abs(spread.z) > OUTLIER_Z
            axes.plot(z[~far], np.full(int((~far).sum()), place), "o", color=SERIES[0], ms=4, alpha=0.7)
            axes.plot(z[far], np.full(int(far.sum()), place), "D", color=SERIES[1], ms=5)
            for sign, side in ((1, "right"), (-1, "left")):
                out = [name for name in spread.outliers if sign * spread.z[spread.entries.index(name)] > 0]
                if out:
                    nearest = min(sign * z[spread.entries.index(name)] for name in out)
                    words = out[0] if len(out) == 1 else f"{out[0]} and {len(out) - 1} more"
                    axes.annotate(words, (sign * nearest, place), xytext=(-6 * sign, 0), fontsize=7,
                                  textcoords="offset points", va="center", ha=side)  # fmt: skip
        axes.set(yticks=np.arange(len(found)), yticklabels=[spread.name for spread in found])
        axes.set(xlim=(-SHOWN_Z - 0.4, SHOWN_Z + 0.4), ylim=(len(found) - 0.4, -0.6), xlabel="robust z")
    return finished(sheet)


def _findings(entries: list[BatchEntry], found: list[Spread]) -> tuple[str, ...]:
    findings = [f"{entry.name}: refused: {entry.refusal}" for entry in entries if entry.refusal]
    findings += [f"{entry.name}: fails {'; '.join(entry.failed_limits)}" for entry in entries if entry.failed_limits]
    model = common_lens_model(entries)
    other = [f"{entry.name} ({entry.lens_model})" for entry in entries if entry.numbers and entry.lens_model != model]
    if other:
        findings.append(
            f"lens: the terms of distortion are compared among modules with model {model} only, not with "
            f"{', '.join(other)}; --lens-model makes all alike"
        )
    for spread in found:
        if spread.outliers:
            findings.append(f"{spread.name}: outliers are {', '.join(spread.outliers)}")
        if spread.stated_sigma and spread.robust_sigma < 0.5 * spread.stated_sigma and len(spread.values) >= 10:
            findings.append(f"{spread.name}: modules lie closer together than their stated deviations allow for")
    return tuple(findings)


def batch_page(entries: list[BatchEntry], found: list[Spread]) -> Page:
    """Build the page of a lot."""
    done = sum(not entry.refusal for entry in entries)
    failed = sum(bool(entry.failed_limits) for entry in entries)
    named = {name for spread in found for name in spread.outliers}
    verdict = (
        f"{done} of {len(entries)} recordings calibrated; {failed} fail a limit; {len(named)} are outliers in a number."
    )
    text = "" if found else "A spread needs three calibrated modules or more."
    figures = (spread_figure(found),) if found else ()
    return Page(
        title="A lot of modules",
        subtitle=f"{len(entries)} recordings",
        state="good" if done == len(entries) and not failed and not named else "attention" if done else "bad",
        verdict=verdict,
        findings=_findings(entries, found),
        cautions=(BLINK_CAUTION,),
        sections=(
            Section("Spread of each number", text, (spread_table(found),) if found else (), figures),
            Section("Recordings", tables=(entry_table(entries, found),)),
        ),
    )
