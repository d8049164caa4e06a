"""Whether the coolant flows as it should: pressure drop, velocity, regime, spread and slow branches.

Every row is a watch at most: a flow outside these limits cools worse or costs pump power, but the pump
and the press decide what is acceptable. What cannot flow at all is an error of the flow stage.
"""

from __future__ import annotations

from morph.check.rows import name_list
from morph.core.verdict import COMMON_PRACTICE, Outcome, Verdict
from morph.core.words import counted
from morph.flow.drive import GivenFlow
from morph.flow.gauge import Gauge
from morph.flow.result import DEAD_SHARE, BranchFlow, FlowResult, Regime

MOST_DROP_BAR = 2.0
"""Pressure drop of a circuit (common practice, no source: 1 to 2 bar)."""

MOST_VELOCITY_M_S = 3.0
"""Velocity in a channel (common practice, no source: 0.5 to 3 m/s)."""

MOST_SPREAD = 4.0
"""95th over 5th percentile of the velocities: beyond, the slow end runs at a quarter of the fast one."""


def check_flow(flow: FlowResult, gauge: Gauge | None = None, pressure_bar: float | None = None) -> tuple[Verdict, ...]:
    """Returns one `flow-drop` row per supply, and `flow-velocity`, `flow-regime`, `flow-slow` and `flow-spread`.

    Args:
        flow: the result.
        gauge: the bench test; adds `flow-blocked-hidden`.
        pressure_bar: gauge, where coolant enters; adds `flow-return-pressure`.
    """
    rows = [_drop(flow, number) for number in range(len(flow.supplies))]
    rows += [_velocity(flow), _regime(flow), _slow(flow), _spread(flow)]
    rows += [] if gauge is None else [_hidden(gauge)]
    return (*rows, *([] if pressure_bar is None else [_return_pressure(flow, pressure_bar)]))


def _return_pressure(flow: FlowResult, pressure_bar: float) -> Verdict:
    """Returns whether coolant still leaves above atmospheric pressure."""
    drop = max(supply.drop_bar for supply in flow.supplies)
    left = pressure_bar - drop
    text = f"Coolant enters at {pressure_bar:.2f} bar gauge and leaves at {left:.2f} bar gauge after {drop:.3f} bar."
    if left < 0.0:
        text += " Below atmosphere only a unit that sucks can drive it."
    return Verdict(
        "flow-return-pressure",
        _watch(left < 0.0),
        text,
        value=left,
        unit="bar",
        limit=0.0,
        source="pressure_bar of the job less the drop; 0 bar gauge is the atmosphere",
        hint=f"Raise pressure_bar to at least {drop:.2f} bar, or lower the flow." if left < 0.0 else "",
    )


def _hidden(gauge: Gauge) -> Verdict:
    """Returns how many branches may be blocked without the bench test of the whole insert showing it."""
    hidden = [row for row in gauge.blocked if not row.detectable]
    threshold = 100.0 * max((row.threshold_ratio for row in gauge.blocked), default=0.0)
    text = f"A bench test shows any single blocked branch: the flow falls by more than {threshold:.1f} %."
    if hidden:
        words = [f"{row.id} ({100.0 * row.flow_loss_ratio:.1f} %)" for row in hidden]
        text = (
            f"{counted(len(hidden), 'branch', 'branches')} of {len(gauge.blocked)} may be blocked without the bench "
            f"test of the whole insert showing it, as the flow falls by less than {threshold:.1f} % (meter 3 % and "
            f"bore band): {name_list(words)}."
        )
    return Verdict(
        "flow-blocked-hidden",
        _watch(bool(hidden)),
        text,
        value=float(len(hidden)),
        unit="count",
        limit=0.0,
        limit_is="most",
        source=f"meter error of 3 %: {COMMON_PRACTICE}; bore band of the process profile",
        branch_ids=tuple(row.id for row in hidden),
        hint="The report's bench test says how to find each: other port pairs, a borescope or an X-ray."
        if hidden
        else "",
    )


def _watch(bad: bool) -> Outcome:
    return Outcome.WATCH if bad else Outcome.PASS


def _through(flow: FlowResult) -> list[BranchFlow]:
    return [row for row in flow.branches if row.is_channel and row.through]


def _drop(flow: FlowResult, number: int) -> Verdict:
    supply, band = flow.supplies[number], flow.bands[number]
    _, drop, most = band.drop_at_flow_bar
    least_flow, _, most_flow = band.flow_at_drop_l_min
    name = f"Supply {number + 1}: " if len(flow.supplies) > 1 else ""
    given = "at" if isinstance(flow.drive, GivenFlow) else "drives"
    if given == "at":
        text = (
            f"{name}{supply.flow_l_min:.2f} L/min take {drop:.3f} bar from feed to return, "
            f"{band.drop_at_flow_bar[0]:.3f} to {most:.3f} bar with every bore {band.bore_mm:.2f} mm wider or narrower."
        )
    else:
        text = (
            f"{name}{drop:.3f} bar from feed to return drive {supply.flow_l_min:.2f} L/min, "
            f"{least_flow:.2f} to {most_flow:.2f} L/min with every bore {band.bore_mm:.2f} mm narrower or wider."
        )
    if supply.hose_bar > 0.0:
        text += f" The hoses take {supply.hose_bar:.3f} bar of it."
    bad = most > MOST_DROP_BAR
    return Verdict(
        "flow-drop",
        _watch(bad),
        text,
        value=drop,
        unit="bar",
        limit=MOST_DROP_BAR,
        limit_is="most",
        band=most - drop,
        source=f"{COMMON_PRACTICE} (1 to 2 bar per circuit)",
        hint="Lower the flow, widen the bores that take most (table of branches), or split the circuit." if bad else "",
    )


def _velocity(flow: FlowResult) -> Verdict:
    fastest = max(flow.branches, key=lambda row: row.velocity_max_m_s)
    fast = [row.id for row in flow.branches if row.velocity_max_m_s > MOST_VELOCITY_M_S]
    text = f"Coolant runs at most at {fastest.velocity_max_m_s:.2f} m/s, in {fastest.id}."
    if fast:
        text += f" {counted(len(fast), 'branch', 'branches')} above {MOST_VELOCITY_M_S:g} m/s: {name_list(fast)}."
    return Verdict(
        "flow-velocity",
        _watch(bool(fast)),
        text,
        value=fastest.velocity_max_m_s,
        unit="m/s",
        limit=MOST_VELOCITY_M_S,
        limit_is="most",
        source=f"{COMMON_PRACTICE} (0.5 to 3 m/s)",
        branch_ids=tuple(fast) or (fastest.id,),
        hint="Widen these bores or lower the flow: fast water wears the wall and costs pressure." if fast else "",
    )


def _regime(flow: FlowResult) -> Verdict:
    through = _through(flow)
    unsure = [row for row in through if row.regime is Regime.TRANSITION]
    laminar = [row for row in through if row.regime in (Regime.LAMINAR, Regime.STILL)]
    share = 1.0 - len(unsure + laminar) / len(through) if through else 0.0
    text = (
        f"{counted(len(through) - len(unsure + laminar), 'channel')} of {len(through)} with through-flow run turbulent."
    )
    if laminar:
        text += f" Below Reynolds 2300: {name_list([row.id for row in laminar])}."
    if unsure:
        spreads = [f"{row.id} {1e3 * a:.1f} to {1e3 * b:.1f} mbar" for row in unsure for a, b in [_ends(row)]]
        text += f" Between 2300 and 4000 either law may hold; friction by both: {name_list(spreads)}."
    bad = bool(unsure or laminar)
    return Verdict(
        "flow-regime",
        _watch(bad),
        text,
        value=share,
        unit="ratio",
        limit=1.0,
        source="Reynolds 2300 and 4000, on the hydraulic diameter: textbook limits of pipe flow",
        branch_ids=tuple(row.id for row in laminar + unsure),
        hint="Laminar water takes up far less heat: raise the flow, or lower the bores of these branches."
        if bad
        else "",
    )


def _ends(row: BranchFlow) -> tuple[float, float]:
    low, high = row.drop_between_bar if row.drop_between_bar is not None else (row.friction_bar, row.friction_bar)
    return min(low, high), max(low, high)


def _slow(flow: FlowResult) -> Verdict:
    through = {row.id for row in _through(flow)}
    slow = [one for one in flow.dead_water if one.id in through]
    words = [f"{one.id} ({100.0 * one.velocity_ratio:.0f} %)" for one in slow]
    below = f"{100.0 * DEAD_SHARE:.0f} % of the mean velocity ({flow.velocity_mean_m_s:.2f} m/s)"
    text = f"No channel with through-flow is slower than {below}."
    if slow:
        text = f"{counted(len(slow), 'channel')} with through-flow below {below}: {name_list(words)}."
    least = min((row.velocity_m_s for row in _through(flow)), default=0.0)
    ratio = least / flow.velocity_mean_m_s if flow.velocity_mean_m_s > 0.0 else 0.0
    return Verdict(
        "flow-slow",
        _watch(bool(slow)),
        text,
        value=ratio,
        unit="ratio",
        limit=DEAD_SHARE,
        source=COMMON_PRACTICE,
        branch_ids=tuple(one.id for one in slow),
        hint='Give [coolant] balance = "equal-velocity", narrow the short-cuts, or drop these branches.'
        if slow
        else "",
    )


def _spread(flow: FlowResult) -> Verdict:
    bad = flow.velocity_p95_over_p5 > MOST_SPREAD
    value = flow.velocity_p95_over_p5
    return Verdict(
        "flow-spread",
        _watch(bad),
        f"The 95th percentile of the channels' velocities is {value:.2f} times the 5th, by length; the fastest is "
        f"{flow.velocity_max_over_min:.2f} times the slowest.",
        value=value,
        unit="ratio",
        limit=MOST_SPREAD,
        limit_is="most",
        source=f"{COMMON_PRACTICE} (the slow end at a quarter of the fast one)",
        hint='Give [coolant] balance = "equal-velocity", or narrow the short-cuts.' if bad else "",
    )
