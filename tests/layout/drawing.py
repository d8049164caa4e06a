"""Small drawings with known answers: channels as lines with a width, anti-aliased like an optimiser's grey edge."""

from __future__ import annotations

import itertools

import numpy as np

from morph.layout.density import Density
from morph.settings.job import LayoutSettings, PortSettings, Role, Samples, Seam


def drawn(lines, size_mm, pitch_mm, samples=Samples.CELLS):
    """Returns the Density with a channel of width w along each polyline of `lines` = [(points_mm, w_mm), ...]."""
    width, height = size_mm
    n, m = round(width / pitch_mm), round(height / pitch_mm)
    if samples is Samples.NODES:
        x, y = np.meshgrid(np.arange(n + 1) * pitch_mm, np.arange(m + 1) * pitch_mm)
    else:
        x, y = np.meshgrid((np.arange(n) + 0.5) * pitch_mm, (np.arange(m) + 0.5) * pitch_mm)
    signed = np.full(x.shape, 1e9)
    for points, channel_width in lines:
        for a, b in itertools.pairwise(np.asarray(points, float)):
            along = b - a
            share = np.clip(((x - a[0]) * along[0] + (y - a[1]) * along[1]) / (along @ along), 0, 1)
            away = np.hypot(x - a[0] - share * along[0], y - a[1] - share * along[1])
            signed = np.minimum(signed, away - channel_width / 2)
    return Density(np.clip(0.5 - signed / pitch_mm, 0, 1), size_mm, samples, Seam.OPEN, "drawn.npy", "0" * 16)


def settings(density, **changes):
    return LayoutSettings(image=None, size_mm=density.size_mm, samples=density.samples, **changes)


def ports(*items):
    """Returns PortSettings from (name, role, x, y) items."""
    return tuple(PortSettings(name, Role(role), (float(x), float(y))) for name, role, x, y in items)


def ring(centre, radius, n=200):
    angle = np.linspace(0, 2 * np.pi, n)
    return np.column_stack([centre[0] + radius * np.cos(angle), centre[1] + radius * np.sin(angle)])
