"""What `inspect`, `plan` and `render` show in the end."""

from __future__ import annotations

from pathlib import Path

from cubeforge.engine.plan import Plan
from cubeforge.engine.render import Outcome
from cubeforge.quantities import show_bytes
from cubeforge.snapshots.describe import SnapshotSummary
from cubeforge.terminal import duration, table


def _numbers(values: tuple[float, ...]) -> str:
    """Three numbers, or one where they are equal."""
    return f"{values[0]:.6g}" if len(set(values)) == 1 else " x ".join(f"{value:.6g}" for value in values)


def show_snapshot(summary: SnapshotSummary) -> None:
    """Levels, fields and size of a snapshot."""
    lo, size = summary.origin, summary.extent
    corners = [f"{name}: {a:.6g} to {a + b:.6g}" for name, a, b in zip("xyz", lo, size, strict=True)]
    table(
        summary.path,
        [
            ["layout", summary.format_name],
            ["time", f"{summary.time:.6g}"],
            ["domain", ", ".join(corners)],
            ["leaf cells", f"{sum(level.leaf_cells for level in summary.levels):,}"],
            ["bytes", show_bytes(summary.bytes)],
            ["identity", summary.identity[:16]],
        ],
    )
    rows = [
        [
            str(level.level),
            f"{level.patches:,}",
            f"{level.cells:,}",
            f"{level.leaf_cells:,}",
            _numbers(level.cell_size),
            f"{100 * level.filled:.3g} %",
        ]
        for level in summary.levels
    ]
    table("levels", rows, headings=["level", "patches", "cells", "leaf cells", "cell size", "of the domain"])
    rows = [
        [
            each.name,
            each.unit or "not stated",
            "-" if each.minimum is None else f"{each.minimum:.6g}",
            "-" if each.maximum is None else f"{each.maximum:.6g}",
        ]
        for each in summary.fields
    ]
    table("fields (bounds include covered cells)", rows, headings=["field", "unit", "least", "greatest"])


def show_plan(plan: Plan, threads: int) -> None:
    """What a render takes."""
    spec = plan.spec
    channels, ny, nx = spec.shape
    fewest, median, most = plan.patches_of_tile
    table(
        f"{spec.molecule} {spec.line}: {nx} x {ny} pixels, {channels} channels",
        [
            ["tiles", f"{plan.tiles:,} of {plan.tile} x {plan.tile} pixels"],
            ["patches in view", f"{plan.patches:,}; behind one tile {fewest} to {most}, median {median}"],
            ["to read", show_bytes(plan.read_bytes)],
            ["in memory, all of it", show_bytes(plan.optical_bytes)],
            ["least memory a worker", f"{show_bytes(plan.least_memory(threads))} with {threads} thread(s)"],
            ["samples a channel", str(plan.nodes)],
            [
                "cube",
                f"{show_bytes(plan.cube_bytes)} before compression; as FITS {show_bytes(plan.fits_bytes)}",
            ],
            ["fingerprint", spec.fingerprint[:16]],
            *(["note", caveat] for caveat in plan.caveats),
        ],
    )


def show_outcome(outcome: Outcome, picture: Path | None) -> None:
    """What came of a render."""
    sums = outcome.totals
    emission = max(sums["emission"], 1e-300)
    rows = [
        ["tiles", f"{outcome.rendered} rendered in {duration(outcome.seconds)}, {outcome.tiles} in the cube"],
        ["crossings", f"{sums['crossings']:.4g} by {sums['rays']:.4g} rays"],
        ["emission outside the channels", f"{100 * outcome.outside:.2g} %"],
        [
            "from cells steeper than a line width",
            f"{100 * sums['emission_steep'] / emission:.2g} % (velocity changes by more than b along the crossing)",
        ],
    ]
    if outcome.sampling_error is not None:
        rows.append(
            [
                "sampling error",
                f"{100 * outcome.sampling_error:.2g} % of the brightest pixel (99 % of pixels have less)",
            ]
        )
    if sums["cell_emission_limited"]:
        share = 100 * sums["cell_emission_limited"] / max(sums["cell_emission"], 1e-300)
        rows.append(["from cells where the limiter acted", f"{share:.2g} %"])
    rows += [["note", caveat] for caveat in outcome.caveats]
    if picture is not None:
        rows.append(["picture", str(picture)])
    table(str(outcome.cube), rows)
