"""The report: one HTML file that opens from disk without a network, prints on A4 and works by keyboard.

The template only lays out; every number in it comes from the records and the summary, and every
text from the job is escaped by the template engine. The script that draws the 3D picture comes
with the plotting library and is written into the page once.
"""

from __future__ import annotations

from functools import cache
from importlib import resources
from typing import Any

from morph.body.exit_wall import least_wall_around, straight_run_mm
from morph.body.plan import BranchKind, ChannelPlan
from morph.core.verdict import Outcome, worst_outcome
from morph.core.words import counted
from morph.report.along import sheet_branches
from morph.report.balance_view import balance_rows, balance_words
from morph.report.colour import OUTCOME_COLOUR, OUTCOME_SIGN, OUTCOME_WORD
from morph.report.density_view import density_caption, draw_density
from morph.report.figures import (
    DIV_ID,
    ChannelScene,
    figure_json,
    make_figure,
    make_scene,
    plotly_script,
)
from morph.report.flow_view import WORDS, flow_numbers, flow_rows, flow_scene
from morph.report.gauge_view import draw_gauge, gauge_rows, point_rows
from morph.report.headline import Figure, five_figures, sorted_verdicts
from morph.report.job_text import job_text
from morph.report.layout_rows import layout_rows, offers
from morph.report.level_view import draw_levels, level_rows, level_words
from morph.report.projection_view import VIEWS, draw_view
from morph.report.records import BuildRecords
from morph.report.section import WallSection, make_section, wall_verdicts
from morph.report.section_view import draw_section
from morph.report.sheet_view import SheetScene, draw_sheet, make_colours
from morph.report.texts import (
    CAUTIONS,
    amount,
    drill_words,
    end_words,
    limit_words,
    outcome_class,
    place_words,
    profile_rows,
)
from morph.settings.job import SeenFrom

TEMPLATE, STYLE, SCRIPT = "report.html", "report.css", "report.js"


@cache
def _text(name: str) -> str:
    return (resources.files("morph.report") / "templates" / name).read_text(encoding="utf-8")


def _section(records: BuildRecords) -> tuple[str, WallSection | None]:
    """Returns the drawing of the section through the worst wall, and the section; empty when no wall was judged."""
    walls = wall_verdicts(records.verdicts)
    for verdict in walls[:1]:
        section = make_section(records.insert, records.plan, verdict, records.job.printing.build_direction)
        if section is not None:
            return draw_section(section, records.blank), section
    return "", None


def sheet_scene(records: BuildRecords) -> SheetScene:
    """Returns what the sheet picture shows: the wall to the part face along every channel.

    Raises:
        ValueError: the records hold no fields.
    """
    if records.fields is None:
        raise ValueError("records.fields: expected measured fields, found None")
    on_sheet = {branch.id for branch in sheet_branches(records.plan)}
    walls = wall_verdicts(records.verdicts)
    worst = None
    if walls and walls[0].branch_ids and walls[0].branch_ids[0] in on_sheet:
        worst = (walls[0].branch_ids[0], walls[0].sheet_mm)
    walls_mm = {item.id: item.wall_mm for item in records.fields.branches if item.id in on_sheet}
    return SheetScene(
        records.plan,
        records.graph.size_mm,
        records.job.layout.seen_from,
        make_colours("sheet", "wall to the finished part face, mm", walls_mm, 0.5),
        {port.name: port.role for port in records.job.ports},
        worst,
        "worst wall",
        records.graph.turn_mm,
        keep_outs=records.job.keep_outs,
    )


def _port_rows(records: BuildRecords) -> list[dict[str, str]]:
    """Returns the ports as words: where they come out, which way, how they are finished and the metal around."""
    plan, blank = records.plan, records.blank
    lead = {branch.id: branch for branch in plan.branches}
    rows = []
    for exit_ in plan.exits:
        wall_mm, neighbour = least_wall_around(exit_, plan.exits, blank)
        stock_mm = blank.face(exit_.face).stock_mm
        rows.append(
            {
                "port": exit_.port,
                "role": exit_.role.value,
                "exit": ", ".join(f"{value + 0.0:.2f}" for value in exit_.xyz_mm) + " mm",
                "leave": ", ".join(f"{value + 0.0:.3f}" for value in exit_.leave),
                "face": exit_.face + (f", under {amount(stock_mm, 'mm')} of stock" if stock_mm > 0.0 else ""),
                "bore": amount(exit_.bore_mm, "mm"),
                "drill_depth": drill_words(exit_, straight_run_mm(lead[exit_.lead], exit_)),
                "wall_around": f"{amount(wall_mm, 'mm')} to {neighbour}" if neighbour else "nothing near",
                "lead": f"{exit_.lead}, {amount(lead[exit_.lead].length_mm, 'mm')}",
                "end": end_words(exit_),
            }
        )
    return rows


def _branch_rows(plan: ChannelPlan) -> list[dict[str, Any]]:
    return [
        {
            "id": branch.id,
            "kind": branch.kind.value,
            "ends": f"{branch.start} – {branch.end}",
            "length": amount(branch.length_mm, "mm"),
            "bore": f"{branch.bore_mm.min():.2f} – {branch.bore_mm.max():.2f} mm",
            "flow": "yes" if branch.through_flow else "no",
        }
        for branch in plan.branches
    ]


def _view_data(scene: ChannelScene) -> str:
    """Returns the other quantities of the 3D picture as JSON: base64 of little-endian single precision."""
    import base64
    import json

    rows = [
        {
            "name": quantity.name,
            "title": quantity.title,
            "unit": quantity.unit,
            "low": round(quantity.low, 6),
            "high": round(quantity.high, 6),
            "values": base64.b64encode(quantity.values.astype("<f4").tobytes()).decode("ascii"),
        }
        for quantity in scene.quantities
    ]
    return json.dumps(rows).replace("<", "\\u003c")


def _figure_place(figure: Figure) -> list[str]:
    ids = [", ".join(figure.branch_ids[:4]) + (" …" if len(figure.branch_ids) > 4 else "")] if figure.branch_ids else []
    return ids + place_words(figure.sheet_mm, figure.xyz_mm)


def _flow_pictures(records: BuildRecords) -> list[tuple[str, Any]]:
    """Returns the sheet coloured by each figure of the flow, as (what is shown, drawing)."""
    from markupsafe import Markup

    if records.flow is None:
        return []
    return [(words, Markup(draw_sheet(flow_scene(records, records.flow, key)))) for key, words in WORDS.items()]


def _gauge_pictures(records: BuildRecords) -> list[tuple[Any, list[tuple[str, str, str]]]]:
    """Returns the curve of each supply as (drawing, rows)."""
    from markupsafe import Markup

    curves = () if records.gauge is None else records.gauge.curves
    return [(Markup(draw_gauge(curve, f"gauge-{k}")), point_rows(curve)) for k, curve in enumerate(curves, start=1)]


def _pictures(records: BuildRecords) -> dict[str, Any]:
    from markupsafe import Markup

    scene = make_scene(records)
    drawing, section = _section(records)
    return {
        "section_svg": Markup(drawing),
        "section": section,
        "sheet_svg": Markup(draw_sheet(sheet_scene(records))),
        "flow_svg": _flow_pictures(records),
        "gauge_svg": _gauge_pictures(records),
        "density_svg": Markup(draw_density(records.density, records.graph, records.job.keep_outs, records.wide)),
        "level_svg": None if records.levels is None else Markup(draw_levels(records.levels, "levels")),
        "views": [(view.words, Markup(draw_view(view, records.plan, records.insert.mesh))) for view in VIEWS],
        "figure_json": Markup(figure_json(make_figure(scene))),
        "view_json": Markup(_view_data(scene)),
        "quantities": scene.quantities,
        "plotly_script": Markup(plotly_script()),
        "style": Markup(_text(STYLE)),
        "script": Markup(_text(SCRIPT)),
    }


def _tables(records: BuildRecords, summary: dict[str, Any]) -> dict[str, Any]:
    verdicts = sorted_verdicts(records.verdicts)
    layout = records.job.layout
    balance, flow = records.balance, records.flow
    return {
        "headline": worst_outcome(records.verdicts),
        "figures": [(figure, _figure_place(figure)) for figure in five_figures(records.verdicts, records.plan)],
        "verdicts": [(v, amount(v.value, v.unit), limit_words(v), place_words(v.sheet_mm, v.xyz_mm)) for v in verdicts],
        "counts": [(outcome, sum(v.outcome is outcome for v in verdicts)) for outcome in Outcome],
        "ports": _port_rows(records),
        "branches": _branch_rows(records.plan),
        "flow_numbers": [] if records.flow is None else flow_numbers(records.flow),
        "flow_rows": [] if records.flow is None else flow_rows(records.flow),
        "gauge_rows": [] if records.gauge is None else gauge_rows(records.gauge),
        "balance_words": "" if balance is None or flow is None else balance_words(balance, flow),
        "balance_rows": [] if balance is None or flow is None else balance_rows(balance, records.plan, flow),
        "n_channels": sum(branch.kind is BranchKind.CHANNEL for branch in records.plan.branches),
        "density_caption": density_caption(records.graph, bool(records.job.keep_outs), bool(records.wide)),
        "layout_rows": layout_rows(summary["layout"]),
        "layout_offers": offers(summary["layout"]),
        "level_words": "" if records.levels is None else level_words(records.levels),
        "level_rows": [] if records.levels is None else level_rows(records.levels),
        "notices": records.notices,
        "job_text": job_text(records.job),
        "profile": profile_rows(summary["settings"]["printing"]["profile"]),
        "mirrored": layout.seen_from is SeenFrom.METAL,
        "seen_from": layout.seen_from.value,
        "cautions": CAUTIONS,
    }


def make_report(records: BuildRecords, summary: dict[str, Any]) -> str:
    """Returns the report as one HTML page.

    Args:
        records: of a finished build, fields included.
        summary: what make_summary said of the same records.

    Raises:
        ValueError: the records hold no fields.
    """
    from jinja2 import DictLoader, Environment, StrictUndefined

    environment = Environment(
        loader=DictLoader({TEMPLATE: _text(TEMPLATE)}),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.globals.update(
        sign=OUTCOME_SIGN,
        word=OUTCOME_WORD,
        colour=OUTCOME_COLOUR,
        css_class=outcome_class,
        amount=amount,
        counted=counted,
        place_words=place_words,
        div_id=DIV_ID,
    )
    template = environment.get_template(TEMPLATE)
    return template.render(summary=summary, **_pictures(records), **_tables(records, summary))
