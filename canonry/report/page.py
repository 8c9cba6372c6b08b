"""The page: one HTML file that says what a study gave, how far it can be trusted and how it was made."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from html import escape
from pathlib import Path

from canonry.figures import Figure, draw
from canonry.notation import as_html, unit_text
from canonry.numbers import plain
from canonry.report import between, frames, health, methods, plots, tables, words
from canonry.report.prose import prose
from canonry.report.rows import at_densities, headline
from canonry.report.setup import Setup
from canonry.report.style import CSS
from canonry.results import Results
from canonry.units import unit_label

__all__ = ["html", "write"]

_OUTCOMES = {
    "agrees": "✓ Agrees with the reference",
    "disagrees": "✗ Disagrees with the reference",
    "undecided": "? Undecided",
    "": "Not compared with a reference",
}
_UNCERTAINTY = (
    "Numbers in parentheses are one standard error in units of the last digits: 1.234(56) is 1.234 ± 0.056. Twice the "
    "standard error is the 95 % interval; bars and bands in figures show that interval, and bars shorter than their "
    "symbol are hidden by it. Standard errors come from the autocorrelation of each estimate's own fluctuation (Gamma "
    "method) and cover chance only, not the limits of the model. The stated accuracy of a reference is read as 95 %, "
    "so half of it enters a deviation as its standard uncertainty."
)
_HEALTH = (
    "A healthy study fails any of its checks by chance in one case out of twenty at most. Every reading, with its "
    "limit and what it means, is in health.csv; what a failed check touches bears a mark in all tables."
)
_BUDGET = (
    "Each source as one standard uncertainty; the expanded one holds those that are known, in squares, and is about "
    "95 %. The shift of a finite box is what a closed box of so many particles adds, by the reference nearest to the "
    "fluid, or what a second size shows; else that of periodic images is not known. Other properties are in budget.csv."
)
_CURVES = (
    "Points are the rungs' own values, which the curve does not pass through by construction; where no curve is drawn, "
    "too few samples support it. A reference is dashed."
)
_SCATTERED = (
    "Each rung with its 95 % band; dashed: the coldest rung of its density. At k = 0: ρT/B_T from the limit of S(k) at "
    "long waves, the long-range part of the pressure added (ring), and from fluctuations (cross, a little to the "
    "left), with 95 % intervals, where B_T is clear of zero."
)
_MAPS = (
    "Lines of equal value are drawn between the points of the grid; darker is more, as the scale beside each map says. "
    "Where a map is blank the surface refuses to answer, or is not to be trusted."
)
_NO_CURVES = "Points are the rungs' own values; rungs of constant energy are not reweighted. A reference is dashed."


def write(results: Results, path: Path) -> None:
    """Write the report of these results to one file that needs no network and no scripts. Raises OSError."""
    path.write_text(html(results), encoding="utf-8")


def html(results: Results) -> str:
    """The report as one HTML document."""
    sets = list(_sets(results))
    title = escape(results.title)
    return "\n".join(
        [
            '<!doctype html><html lang="en"><head><meta charset="utf-8">',
            '<meta name="viewport" content="width=device-width,initial-scale=1">',
            f"<title>{title}</title><style>{CSS}</style></head><body><main>",
            f'<header><p class="kind">Canonical sampling of a model fluid</p><h1>{title}</h1></header>',
            *_verdict(results),
            *_contents(results, sets),
            *(part for number, (where, own) in enumerate(sets) for part in _set(number, where, own)),
            *_between(results),
            *_health(results, sets),
            *_caveats(results),
            *_methods(results),
            *_provenance(results),
            "</main></body></html>",
        ]
    )


def _sets(results: Results) -> Iterator[tuple[str, Results]]:
    """The isochores, each with its density in words; states that share their density with no other come as one set."""
    states = results.properties[["density", "temperature"]].drop_duplicates()
    sizes = states.groupby("density").size()
    unit = unit_text(unit_label("density", results.units))
    for density in sizes.index[sizes > 1]:
        yield f"density {plain(float(density))} {unit}", at_densities(results, [float(density)])
    single = [float(density) for density in sizes.index[sizes == 1]]
    if single:
        where = f"density {plain(single[0])} {unit}" if len(single) == 1 else "single states"
        yield where, at_densities(results, single)


def _verdict(results: Results) -> Iterator[str]:
    outcome = words.outcome(results)
    yield f'<section class="verdict {outcome or "none"}"><p class="word">{_OUTCOMES[outcome]}</p>'
    yield from _paragraphs([words.question(results), *words.answers(results), *words.agreement(results)])
    yield from _paragraphs([health.checked(results)])
    doubts = words.doubts(results)
    if doubts:
        yield f"<h3>What should not be trusted</h3>{_list(doubts)}"
    yield "</section>"


def _contents(results: Results, sets: list[tuple[str, Results]]) -> Iterator[str]:
    links = [(f"set-{number}", where.capitalize()) for number, (where, _) in enumerate(sets)]
    links += [("between", "Between the isochores")] if len(results.surface) else []
    links += [("health", "Health"), ("caveats", "Caveats"), ("methods", "Methods"), ("provenance", "Provenance")]
    items = "".join(f'<li><a href="#{to}">{as_html(text)}</a></li>' for to, text in links)
    yield f"<nav><ul>{items}</ul></nav>"
    yield f'<p class="fine">{prose(_UNCERTAINTY)}</p>'


def _set(number: int, where: str, results: Results) -> Iterator[str]:
    several = results.properties["density"].nunique() > 1
    side = "" if several else "plots"
    isochore = results.properties["temperature"].nunique() > 1 and not several
    yield f'<section id="set-{number}"><h2>{as_html(where.capitalize())}</h2>'
    yield tables.values(results, with_density=several)
    yield from _notes(results)
    if isochore:
        known = set(results.properties["property"])
        names = [name for name in (words.heat_capacity_name(results), "pressure", "residual_energy") if name in known]
        figures = [plots.curves(results, where, name) for name in names]
        figures += [plots.deviations(results, where, names)] if len(results.verdict) else []
        yield _plots(figures)
        yield f'<p class="fine">{prose(_CURVES if Setup.of(results).bath else _NO_CURVES)}</p>'
    yield from _tabled("Further properties", tables.derived(results, with_density=several))
    yield from _tabled("Free energy and entropy", tables.absolute(results, with_density=several))
    yield from (f'<p class="fine">{prose(note)}</p>' for note in frames.absolute(results))
    yield from _tabled("Comparison, value by value", "".join(tables.comparison(results)), f"{side} comparison")
    further = tables.comparison(results, further=True)
    if further:
        yield "<details><summary>Comparison of further properties</summary>"
        yield f'<div class="{side} comparison">{"".join(further)}</div></details>'
    budget = tables.budget(results, [words.heat_capacity_name(results), "pressure"])
    if budget:
        yield f"<details><summary>Uncertainty budget</summary>{budget}"
        yield f'<p class="fine">{prose(_BUDGET)}</p></details>'
    yield from _sampled(where, results, isochore)
    yield "</section>"


def _sampled(where: str, results: Results, isochore: bool) -> Iterator[str]:
    bath = Setup.of(results).bath
    figures = [plots.histograms(results, where)] if isochore and len(results.histograms) else []
    figures += [plots.ledger(results, where, bath)] if len(results.ledger) else []
    yield from _tabled("How it was sampled", tables.sampling(results), "wide")
    yield _plots(figures)
    if len(results.structure):
        yield "<h3>Structure: pair distribution g(r)</h3>"
        caption = (
            f"Each rung with its 95 % band; dashed: the coldest rung of its density. {plots.gain(results.structure)}"
        )
        yield f'<p class="fine">{prose(caption.strip())}</p>'
        yield _plots(plots.structure(results, where), "small plots", captions=False)
    if len(results.structure_factor):
        yield "<h3>Long waves: structure factor S(k)</h3>"
        yield f'<p class="fine">{prose(" ".join([_SCATTERED, *frames.long_waves(results)]))}</p>'
        yield _plots(plots.structure_factor(results, where), "small plots", captions=False)


def _between(results: Results) -> Iterator[str]:
    if len(results.surface):
        yield '<section id="between"><h2>Between the isochores</h2>'
        yield from _paragraphs(between.sentences(results))
        yield _plots(between.maps(results, [words.heat_capacity_name(results), "pressure"]))
        yield f'<p class="fine">{prose(_MAPS)}</p></section>'


def _health(results: Results, sets: list[tuple[str, Results]]) -> Iterator[str]:
    yield '<section id="health"><h2>Health</h2>'
    failed = health.told(results)
    if failed:
        yield _list(failed)
    if len(results.health):
        yield f'<div class="health">{tables.checks(results, sets)}</div>'
    reduced = " Figures within those sentences are in reduced units." if results.units == "SI" else ""
    yield f'<p class="fine">{prose(_HEALTH + reduced)}</p></section>'


def _caveats(results: Results) -> Iterator[str]:
    yield '<section id="caveats"><h2>Caveats</h2>'
    yield _list([*results.caveats, *methods.standing_caveats(results)])
    yield "</section>"


def _methods(results: Results) -> Iterator[str]:
    yield '<section id="methods"><h2>Methods, ready to paste</h2>'
    yield from _paragraphs([methods.paragraph(results)])
    yield f"<ol>{''.join(f'<li>{as_html(work)}.</li>' for work in methods.citations(results))}</ol>"
    if methods.support(results):
        yield f'<p class="fine">{prose(methods.support(results))}</p>'
    yield "</section>"


def _provenance(results: Results) -> Iterator[str]:
    entries = "".join(f"<dt>{escape(key)}</dt><dd>{escape(text)}</dd>" for key, text in results.provenance.items())
    yield f'<section id="provenance"><h2>Provenance</h2><dl>{entries}</dl>'
    yield f"<h3>The study, complete with defaults</h3><pre>{escape(results.study_toml)}</pre>"
    table = escape(results.summary.to_csv(index=False))
    yield f"<details><summary>Headline values as comma-separated text</summary><pre>{table}</pre></details>"
    yield "</section>"


def _notes(results: Results) -> Iterator[str]:
    rows, notes = headline(results), []
    texts = {"caution": "† with caution: the error bar is less certain", "no": "‡ not to be trusted"}
    shown = [text for trust, text in texts.items() if trust in set(rows["trust"])]
    notes += [f"{'; '.join(shown)}; reasons above."] if shown else []
    if {"heat_capacity", "residual_heat_capacity"} <= set(rows["property"]):
        ideal = Setup.of(results).ideal_heat_capacity
        notes.append(f"c_v holds the ideal part of {ideal} k_B a particle; c_v,res is c_v less that.")
    if "set_temperature" in results.summary:
        notes.append("T is the temperature measured, from the mean kinetic energy; T as set is that of the study file.")
    yield from (f'<p class="fine">{prose(note)}</p>' for note in notes)


def _tabled(title: str, table: str, kind: str = "") -> Iterator[str]:
    if table:
        yield f'<h3>{title}</h3><div class="{kind}">{table}</div>'


def _plots(figures: Iterable[Figure], kind: str = "plots", *, captions: bool = True) -> str:
    drawn = "".join(_figure(figure, captions) for figure in figures)
    return f'<div class="{kind}">{drawn}</div>' if drawn else ""


def _figure(figure: Figure, caption: bool) -> str:
    text = f"<figcaption>{as_html(figure.description)}</figcaption>" if caption else ""
    return f"<figure>{draw(figure)}{text}</figure>"


def _paragraphs(texts: Iterable[str]) -> Iterator[str]:
    return (f"<p>{prose(text)}</p>" for text in texts)


def _list(texts: Iterable[str]) -> str:
    return f"<ul>{''.join(f'<li>{prose(text)}</li>' for text in texts)}</ul>"
