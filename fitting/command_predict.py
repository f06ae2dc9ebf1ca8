"""The body of `predict`: film modes and guides of a stack as it is stated."""

from __future__ import annotations

import json
import sys
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

import click
from layerlot.solver.materials import Table

from .observables.guide import GuideContext, guide_parts
from .observables.guide_map import Progress
from .predict_faults import guide_faults, start_faults, wavelength_faults
from .predict_film import film_record, predict_film
from .predict_guide import GuidePrediction, guide_contexts, guide_record, predict_guide
from .predict_text import prediction_text
from .records import Fault, InputRefused, Place
from .stack import Stack, load_stack

if TYPE_CHECKING:
    from .report.guide_field import FieldPanel

# The red helium-neon line, on which most prism couplers are built, and the middle of the band that guides on chips are
# mostly made for (both common practice, no source).
USUAL_NM, USUAL_GUIDE_NM = 632.8, 1550.0


def run_predict(
    stack_file: Path,
    wavelengths_nm: Sequence[float],
    pol: str | None,
    as_json: bool,
    plain: bool = False,
    field: Path | None = None,
) -> int:
    """Print the prediction, and draw the guides' fields if asked; returns the exit status, 1 where a guide is flagged.
    plain: guides by the effective index method alone. Raises InputRefused with every reason why there is none."""
    stack = load_stack(stack_file)
    asked = list(dict.fromkeys(wavelengths_nm))
    film_nm = asked or _default_nm(stack, films=True)
    guide_nm = (asked or _default_nm(stack, films=False)) if stack.structures else []
    faults = [*start_faults(stack), *guide_faults(stack), *wavelength_faults(stack, film_nm, guide_nm)]
    if field is not None:
        faults += _field_faults(stack, field)
    if faults:
        raise InputRefused(faults)
    pols = [pol] if pol else ["TE", "TM"]
    modes = predict_film(stack, film_nm, pols)
    contexts = guide_contexts(stack, guide_nm, pols)
    with _progress() as progress:
        guides = predict_guide(stack, contexts, plain, progress)
    drawn = "" if field is None else _draw(stack, contexts, guides, plain, field)
    if as_json:
        document = {"film_modes": [film_record(m, stack) for m in modes], "guide": [guide_record(g) for g in guides]}
        click.echo(json.dumps(document, allow_nan=False))
    else:
        click.echo(prediction_text(stack, modes, guides, film_nm, guide_nm, bool(wavelengths_nm)), nl=False)
    if drawn:
        click.echo(drawn, err=as_json)
    return 1 if any(g.flagged for g in guides) else 0


def _default_nm(stack: Stack, films: bool) -> list[float]:
    """The wavelengths at which the file's tables state an index, else the usual line: of prism couplers for films,
    unless the file speaks of guides and no prism."""
    specs = [s for layer in stack.layers for s in (layer.index, layer.index_normal)]
    if stack.prism is not None:
        specs += [stack.prism.index_TE, stack.prism.index_TM]
    tables = [s.material.formula for s in specs if s and s.name is None and s.material]
    stated = sorted({round(w * 1000, 6) for t in tables if isinstance(t, Table) for w in t.wavelength_um})
    prism_line = films and (stack.prism is not None or not stack.structures)
    return stated or [USUAL_NM if prism_line else USUAL_GUIDE_NM]


def _field_faults(stack: Stack, field: Path) -> list[Fault]:
    from .report.guide_field import SUFFIXES

    faults = []
    place = Place("command line", column="--field")
    if not stack.structures:
        required, remedy = "a field needs [guide] and [[structure]]", "see layerlot template guide"
        faults.append(Fault(place, f"no structure in {stack.file}", required, remedy))
    if field.suffix.lower() not in SUFFIXES:
        was = f"a file ending in {field.suffix or 'nothing'}"
        required = f"a field is drawn as {', '.join(SUFFIXES[:-1])} or {SUFFIXES[-1]}"
        faults.append(Fault(place, was, required, f"name it with {SUFFIXES[0]}"))
    if field.is_dir() or not field.absolute().parent.is_dir():
        was = "a folder" if field.is_dir() else f"no folder {field.absolute().parent}"
        faults.append(Fault(place, was, "a file in an existing folder is required", "check the path"))
    return faults


def _draw(
    stack: Stack, contexts: Sequence[GuideContext], guides: Sequence[GuidePrediction], plain: bool, field: Path
) -> str:
    """Draw the fields of the guides that hold a mode, like cross-sections once; returns the line that says where."""
    from .report.guide_field import draw_fields

    panels = _panels(stack, contexts, guides)
    if not panels:
        return "No field was drawn: no guide holds a mode."
    try:
        draw_fields(panels, field, plain)
    except OSError as error:
        was = f"cannot be written ({error.strerror or error})"
        raise InputRefused(
            [Fault(Place(str(field)), was, "room and rights are required", "name another file")]
        ) from None
    return f"Field: {field}"


def _panels(stack: Stack, contexts: Sequence[GuideContext], guides: Sequence[GuidePrediction]) -> list[FieldPanel]:
    """A panel for each cross-section, wavelength and polarisation, named after all structures that have it."""
    from layerlot.solver.map_nodes import single

    from .report.guide_field import FieldPanel

    found = [(c, g) for c, g in zip(contexts, guides, strict=True) if g.n_eff is not None]
    alike: dict[tuple[float, float, str], list[int]] = {}
    for k, (c, g) in enumerate(found):
        alike.setdefault((c.structure.drawn_width_um, g.wavelength_nm, g.pol), []).append(k)
    if not alike:
        return []
    section = guide_parts(stack, [c for c, _ in found]).section
    panels = []
    for (_, nm, pol), rows in alike.items():
        context, guide = found[rows[0]]
        names = ", ".join(found[k][0].structure.name for k in rows)
        assert guide.n_eff is not None
        N = float(stack.index_inside(guide.n_eff, section.wavelength_um[rows[0]]))
        title = f"{names}: {pol}{guide.order} at {nm:g} nm, n_eff {guide.n_eff:.4f}"
        panels.append(FieldPanel(title, single(section, rows[0]), context.tm, context.order, N))
    return panels


@contextmanager
def _progress() -> Iterator[Progress | None]:
    """A bar on standard error, on a terminal only."""
    if not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import BarColumn, TextColumn, TimeRemainingColumn
    from rich.progress import Progress as Bar

    layout = (
        TextColumn("{task.description}"),
        BarColumn(),
        TextColumn("{task.percentage:.0f} %"),
        TimeRemainingColumn(),
    )
    with Bar(*layout, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("", total=None)
        yield lambda what, done, total: bar.update(task, description=what, completed=done, total=total)
