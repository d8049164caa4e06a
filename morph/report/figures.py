"""The interactive picture: the insert see-through, the channels coloured, built once as a plotly figure.

The figure holds one quantity; the page swaps in the others by name. Data come first: every array
stands in a ChannelScene before anything is drawn.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from morph.check.centreline import make_centrelines
from morph.check.channel_wall import nearest_samples, sub_mesh
from morph.check.fields import ChannelFields
from morph.core.arrays import Floats, Ints
from morph.geometry.mesh import Mesh
from morph.report.along import sheet_branches
from morph.report.colour import map_scale, round_scale
from morph.report.decimate import make_screen_mesh
from morph.report.flow_view import PRESSURE, REYNOLDS, VELOCITY, WORDS, along_branch
from morph.report.legend import PORT_COLOUR
from morph.report.records import BuildRecords

MOST_CHANNEL_TRIANGLES, MOST_SKIN_TRIANGLES = 44000, 16000
"""Together at most 60 000 triangles, which a laptop turns smoothly without a graphics card."""

DIV_ID = "channels-3d"
BODY = "#9fb0c3"


@dataclass(frozen=True, slots=True, eq=False)
class Quantity:
    """What the channels can be coloured by: `values (n,)` per screen vertex, and the ends of the scale."""

    name: str
    title: str
    unit: str
    values: Floats
    low: float
    high: float


@dataclass(frozen=True, slots=True, eq=False)
class ChannelScene:
    """What the interactive picture shows.

    Args:
        channels, skin: the meshes on screen.
        branch: name of the branch each channel vertex belongs to.
        quantities: what can be shown, the first one at start.
        exits: (name, role, place) of every exit.
    """

    channels: Mesh
    skin: Mesh
    branch: tuple[str, ...]
    quantities: tuple[Quantity, ...]
    exits: tuple[tuple[str, str, tuple[float, float, float]], ...]


def _quantity(name: str, title: str, unit: str, values: Floats) -> Quantity:
    low, high = float(values.min()), float(values.max())
    return Quantity(name, title, unit, values, low, high if high > low else low + 1.0)


def _wall_scale_mm(records: BuildRecords, fields: ChannelFields) -> tuple[float, float]:
    """Returns the ends of the sheet picture's colour scale, so that a colour means the same wall in both."""
    on_sheet = {branch.id for branch in sheet_branches(records.plan)}
    walls = np.concatenate([item.wall_mm for item in fields.branches if item.id in on_sheet])
    return round_scale(float(walls.min()), float(walls.max()))


def make_scene(records: BuildRecords) -> ChannelScene:
    """Returns the meshes, decimated for the screen, and the figures over the channels.

    Raises:
        ValueError: the records hold no fields.
    """
    if records.fields is None:
        raise ValueError("records.fields: expected measured fields, found None")
    full, fields = records.solid.trimmed, records.fields
    small = make_screen_mesh(full, MOST_CHANNEL_TRIANGLES)
    skin = sub_mesh(records.insert.mesh, np.flatnonzero(records.insert.channel_triangle == 0))
    lines = make_centrelines(records.plan)
    sample = small.first_of(nearest_samples(lines, full.vertices_mm))
    names = tuple(records.plan.branches[int(i)].id for i in lines.branch[sample])
    return ChannelScene(
        small.mesh,
        make_screen_mesh(skin, MOST_SKIN_TRIANGLES).mesh,
        names,
        (
            Quantity(
                "wall",
                "Wall to the finished part face (colours as on the sheet; a lead beyond the scale has its end colour)",
                "mm",
                small.mean_of(fields.wall_mm),
                *_wall_scale_mm(records, fields),
            ),
            _quantity("bore", "Bore as written", "mm", small.mean_of(fields.bore_mm)),
            Quantity(
                "ceiling",
                "Angle from the plate (0 ceiling, 90 upright, 180 floor)",
                "deg",
                small.mean_of(fields.ceiling_deg),
                0.0,
                180.0,
            ),
            *_flow_quantities(records, sample),
        ),
        tuple(
            (e.port, e.role.value, (float(e.xyz_mm[0]), float(e.xyz_mm[1]), float(e.xyz_mm[2])))
            for e in records.plan.exits
        ),
    )


def _flow_quantities(records: BuildRecords, sample: Ints) -> list[Quantity]:
    """Returns what the flow adds, at the channels' vertices by their centreline samples; nothing without a flow."""
    if records.flow is None:
        return []
    flow = records.flow
    rows = [along_branch(flow, index) for index in range(len(records.plan.branches))]
    units = {VELOCITY: "m/s", REYNOLDS: "", PRESSURE: "bar"}
    return [
        _quantity(key, words.capitalize(), units[key], np.concatenate([row[key] for row in rows])[sample])
        for key, words in WORDS.items()
    ]


def hover_words(scene: ChannelScene) -> list[str]:
    """Returns what is shown under the cursor at each channel vertex."""
    wall, bore, angle = (quantity.values for quantity in scene.quantities[:3])
    return [
        f"{name}: bore {b:.2f} mm, wall {w:.2f} mm, angle {a:.0f} deg"
        for name, b, w, a in zip(scene.branch, bore.tolist(), wall.tolist(), angle.tolist(), strict=True)
    ]


def _mesh_arrays(mesh: Mesh) -> dict[str, Any]:
    points, corner = mesh.vertices_mm.astype(np.float32), mesh.triangles.astype(np.int32)
    return {
        **{name: points[:, axis].copy() for axis, name in enumerate("xyz")},
        **{name: corner[:, axis].copy() for axis, name in enumerate("ijk")},
    }


def make_figure(scene: ChannelScene) -> Any:
    """Returns the plotly figure of `scene`, coloured by its first quantity."""
    import plotly.graph_objects as go

    shown = scene.quantities[0]
    channels = go.Mesh3d(
        **_mesh_arrays(scene.channels),
        name="channels",
        intensity=shown.values.astype(np.float32),
        colorscale=map_scale(),
        cmin=shown.low,
        cmax=shown.high,
        colorbar={"title": {"text": shown.unit}, "thickness": 16, "len": 0.7, "x": 1.0},
        text=hover_words(scene),
        hovertemplate="%{text}<extra></extra>",
        lighting={"ambient": 0.62, "diffuse": 0.5, "specular": 0.08, "roughness": 0.9},
    )
    skin = go.Mesh3d(
        **_mesh_arrays(scene.skin), name="insert", color=BODY, opacity=0.16, hoverinfo="skip", flatshading=True
    )
    exits = go.Scatter3d(
        x=[e[2][0] for e in scene.exits],
        y=[e[2][1] for e in scene.exits],
        z=[e[2][2] for e in scene.exits],
        mode="markers+text",
        text=[f"{name} ({role})".replace("<", "&lt;") for name, role, _ in scene.exits],
        textposition="bottom center",
        textfont={"color": PORT_COLOUR, "size": 13},
        marker={"size": 5, "color": PORT_COLOUR},
        hoverinfo="text",
        name="exits",
    )
    axis = {"showbackground": False, "gridcolor": "#d9dee3", "zerolinecolor": "#d9dee3"}
    return go.Figure(
        data=[channels, skin, exits],
        layout={
            "template": "none",
            "scene": {
                "aspectmode": "data",
                "camera": {"eye": {"x": 1.75, "y": 1.4, "z": 0.65}, "center": {"x": 0.0, "y": 0.0, "z": -0.12}},
                **{f"{name}axis": {**axis, "title": {"text": f"{name}, mm"}} for name in "xyz"},
            },
            "margin": {"l": 0, "r": 0, "t": 0, "b": 0},
            "showlegend": False,
            "uirevision": "keep",
        },
    )


def figure_json(figure: Any) -> str:
    """Returns the figure as JSON, arrays in binary, safe inside a script element."""
    return str(figure.to_json()).replace("<", "\\u003c")


def plotly_script() -> str:
    """Returns the script that draws the figure in a browser; it comes with the library."""
    from plotly.offline import get_plotlyjs

    return str(get_plotlyjs())
