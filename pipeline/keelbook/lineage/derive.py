"""`derive`: apply a formula to blocks, and write down what it was applied to.

This is the one place where inputs are lined up with outputs, where status, confidentiality and data basis
follow the figures, and where the derivation is recorded. Stages say what; they do no arithmetic of their own.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, fields
from typing import Any

import numpy as np

from keelbook.blocks import (
    B1,
    ESTIMATED,
    F4,
    F8,
    I1,
    I4,
    I8,
    NO_FIGURE,
    NORMAL,
    OWN_PERIOD,
    PROVISIONAL,
    Block,
    BlockKey,
    Derivation,
    Edges,
    MethodSet,
    Origin,
    RoleLink,
    SeriesIndex,
)
from keelbook.lineage.formula import Formula, Role, Setting, values_of
from keelbook.lineage.lag import Lag, WarmUp
from keelbook.lineage.primitives import Either, Groups, Rule, Span


@dataclass(frozen=True)
class Given:
    """The input of one role: a block read through a projection, or blocks read through edges per series.

    observation: the block holds observations, at their own frequency. at_reference: every period reads the
    figure of that year, the reference year. own: keys of the series that the edges are for, in order, where they are
    to be read for some of them.
    """

    blocks: tuple[Block, ...]
    project: Mapping[str, str] = field(default_factory=dict)
    edges: Edges | None = None
    observation: bool = False
    at_reference: int | None = None
    own: I8 | None = None


def given(block: Block, **project: str) -> Given:
    """Read `block` at the output's own key, after setting the named dimensions."""
    return Given((block,), project)


def in_year(block: Block, year: int, **project: str) -> Given:
    """Read the figure of one year for every period."""
    return Given((block,), project, at_reference=year)


@dataclass(frozen=True)
class _Lined:
    """One input lined up with the outputs (or members), each array (T, N)."""

    value: F8
    status: I1 | None
    conf: I1 | None
    imputed: F4 | None
    assumed: F4 | None


def line_up(role: Role, source: Given, like: SeriesIndex, periods: range) -> _Lined:
    """Return the input of one role for every series of `like`; NaN where the input has none."""
    if source.edges is None:
        block = source.blocks[0]
        columns = block.series.locate(like.projected(source.project))
        lined = _columns(block, columns)
        if source.at_reference is not None:
            return _repeated(lined, source.at_reference - periods[0])
        return lined if source.observation else _shifted(lined, role.shift)
    out = _Lined(np.full((len(periods), len(like)), np.nan), None, None, None, None)
    for i, block in enumerate(source.blocks):
        mine = np.flatnonzero((source.edges.which == i) & (source.edges.key >= 0))
        if len(mine):
            part = _columns(block, block.series.locate(source.edges.key[mine]))
            if source.edges.period is not None:
                part = _at_periods(part, source.edges.period[mine], periods)
            out = _overlay(out, part, mine)
    return _shifted(out, role.shift)


def _columns(block: Block, columns: I8) -> _Lined:
    if len(columns) == len(block.series) and bool(np.all(columns == np.arange(len(columns)))):
        return _Lined(block.value, block.status, block.conf, block.imputed, block.assumed)
    none = columns < 0
    at = np.where(none, 0, columns)
    if not len(block.series):
        value = np.full((len(block.periods), len(columns)), np.nan)
        return _Lined(value, None, None, None, None)
    value = block.value[:, at]
    if none.any():
        value[:, none] = np.nan
    return _Lined(
        value,
        None if block.status is None else block.status[:, at],
        None if block.conf is None else block.conf[:, at],
        None if block.imputed is None else block.imputed[:, at],
        None if block.assumed is None else block.assumed[:, at],
    )


def _overlay(base: _Lined, part: _Lined, columns: I8) -> _Lined:
    """Return the first with some of its columns replaced by the second."""

    def over(old: Any, new: Any) -> Any:
        if new is None:
            return old
        full = np.zeros(base.value.shape, new.dtype) if old is None else old.copy()
        full[:, columns] = new
        return full

    return _Lined(*(over(getattr(base, f.name), getattr(part, f.name)) for f in fields(base)))


def _at_periods(x: _Lined, period: I8, periods: range) -> _Lined:
    """Return for each series the figure of its own fixed period in every period."""
    own = period == OWN_PERIOD
    row = np.where(own, 0, period - periods.start)

    def read(a: Any) -> Any:
        if a is None:
            return None
        fixed = np.broadcast_to(a[row, np.arange(a.shape[1])], a.shape)
        return np.where(own, a, fixed)

    return _Lined(*(read(getattr(x, f.name)) for f in fields(x)))


def _repeated(x: _Lined, row: int) -> _Lined:
    """Return the figures of one period for every period."""

    def repeat(a: Any) -> Any:
        return None if a is None else np.broadcast_to(a[row], a.shape)

    return _Lined(*(repeat(getattr(x, f.name)) for f in fields(x)))


def _shifted(x: _Lined, shift: int) -> _Lined:
    if shift == 0:
        return x

    def move(a: np.ndarray | None, empty: float) -> np.ndarray | None:
        if a is None:
            return None
        out = np.full_like(a, empty)
        if shift < 0:
            out[-shift:] = a[:shift]
        else:
            out[:-shift] = a[shift:]
        return out

    value = move(x.value, np.nan)
    assert value is not None
    return _Lined(value, move(x.status, NORMAL), move(x.conf, 0), move(x.imputed, 0), move(x.assumed, 0))


def derive(
    formula: Formula,
    out: BlockKey,
    series: SeriesIndex,
    periods: range,
    inputs: Mapping[str, Given],
    *,
    sets: Sequence[MethodSet] = ((),),
    which: I4 | None = None,
    group: Mapping[str, str] | None = None,
    chosen: bool | B1 = True,
    part: bool | B1 = True,
) -> Block:
    """Return the block of `formula` for `series`.

    Args:
        inputs: one `Given` per role of the formula.
        sets, which: parameter sets and which of them each output series uses.
        group: for a formula over groups, the projection that takes a member of the first role's block to its
            output; members are that block's series that count as parts.
    """
    if set(inputs) != {role.name for role in formula.roles}:
        raise ValueError(f"{formula.name} takes {[r.name for r in formula.roles]}, given {sorted(inputs)}")
    n = len(series)
    of_set = np.zeros(n, np.int32) if which is None else which.astype(np.int32)
    like, groups = series, Groups(np.arange(n, dtype=np.int32), n)
    if group is not None:
        first = inputs[formula.roles[0].name].blocks[0]
        like = first.series.take(first.part)
        groups = Groups(series.locate(like.projected(group)).astype(np.int32), n)
    lined = [line_up(role, inputs[role.name], like, periods) for role in formula.roles]
    rule = formula.build(Setting(values_of(sets), of_set, periods, groups))
    x = [item.value for item in lined]
    value = rule.compute(*x)
    kinds = [
        [
            getattr(item, kind) if role.counted else _uncounted(formula, item.value)
            for role, item in zip(formula.roles, lined, strict=True)
        ]
        for kind in ("imputed", "assumed")
    ]
    imputed, assumed = rule.mix(x, value, kinds)
    if formula.assumed:
        imputed, assumed = None, np.ones(value.shape, np.float32)
    return Block(
        key=out,
        series=series,
        periods=periods,
        value=value,
        origin=Origin(
            (_derivation(formula, out, inputs, group),),
            np.zeros(n, np.int32),
            tuple(sets),
            of_set,
            {role.name: edges for role in formula.roles if (edges := inputs[role.name].edges) is not None},
        ),
        chosen=np.broadcast_to(np.asarray(chosen, bool), (n,)).copy(),
        part=np.broadcast_to(np.asarray(part, bool), (n,)).copy(),
        status=_status(formula, rule, x, lined, value, groups),
        conf=_confidentiality(formula, rule, x, lined, value, groups),
        imputed=imputed,
        assumed=assumed,
    )


def _uncounted(formula: Formula, like: F8) -> F4 | None:
    """Return the parts of an input that is a parameter: in a pointwise rule it rests on nothing (NaN)."""
    return np.broadcast_to(np.float32(np.nan), like.shape) if formula.kind == "each" else None


def _derivation(
    formula: Formula, out: BlockKey, inputs: Mapping[str, Given], group: Mapping[str, str] | None
) -> Derivation:
    links = []
    for role in formula.roles:
        source = inputs[role.name]
        if source.observation:
            kind, key, project = "observation", source.blocks[0].key, source.project
        elif source.edges is not None:
            kind, key, project = "edge", None, source.project
        else:
            key, project = source.blocks[0].key, source.project
            kind = "same" if group is None else "group"
            if source.at_reference is not None:
                kind = "reference"
        if kind == "group" and role is formula.roles[0]:
            project = group or {}
        links.append(RoleLink(role.name, kind, key, tuple(sorted(project.items())), role.shift))
    return Derivation(formula.name, out, tuple(links))


def _status(
    formula: Formula, rule: Rule, x: list[F8], lined: list[_Lined], value: F8, groups: Groups
) -> I1 | None:
    if formula.carries:
        return _carried(lined[0].status, value)
    out = np.full(value.shape, ESTIMATED if formula.estimated else NORMAL, np.int8)
    if isinstance(rule, Either) and rule.estimated:
        out[rule.branch(*x) > 0] = ESTIMATED
    for item in lined:
        if item.status is not None and len(item.status) == len(value):
            flagged = item.status == PROVISIONAL
            if flagged.any():
                flagged = (
                    groups.reduce(flagged.astype(np.float64)) > 0 if formula.kind == "group" else flagged
                )
                out[flagged & (out == NORMAL)] = PROVISIONAL
    out[np.isnan(value)] = NO_FIGURE
    return out if (out[np.isfinite(value)] != NORMAL).any() else None


def _carried(status: I1 | None, value: F8) -> I1 | None:
    """Return the status of delivered figures; a year of several periods has that of its first flagged one."""
    if status is None or len(status) == len(value):
        return status
    periods = status.reshape(len(value), -1, status.shape[1])
    flagged = periods > NORMAL
    first = np.take_along_axis(periods, np.argmax(flagged, axis=1)[:, None, :], axis=1)[:, 0, :]
    out = np.where(flagged.any(axis=1), first, NORMAL).astype(np.int8)
    out[(periods == PROVISIONAL).any(axis=1)] = PROVISIONAL
    out[np.isnan(value)] = NO_FIGURE
    return out


def _confidentiality(
    formula: Formula, rule: Rule, x: list[F8], lined: list[_Lined], value: F8, groups: Groups
) -> I1 | None:
    """Return the conf status that follows from the inputs: whatever rests on a hidden figure is hidden.

    A sum over time (a stock) stays hidden for all later periods: two consecutive stocks and a known rate would
    give the hidden flow away. A span may reach later periods (a trend window, an index before its reference
    year), which count as well. Sums over series are hidden too: no count and dominance rule is declared.
    """
    hidden = [item.conf for item in lined if item.conf is not None and item.conf.any()]
    if not hidden:
        return None
    out = np.zeros(value.shape, np.int8)
    for conf in hidden:
        whole = conf.reshape(len(value), -1, conf.shape[1]).max(axis=1)
        if formula.kind == "group":
            whole = (np.nan_to_num(groups.reduce((whole > 0).astype(np.float64))) > 0).astype(np.int8)
        elif formula.kind == "series":
            if isinstance(rule, Span):
                whole = np.maximum(whole, _reached(conf, rule, x[0]))
            elif not isinstance(rule, Lag | WarmUp):
                whole = np.broadcast_to(whole.max(axis=0), whole.shape)
            whole = np.maximum.accumulate(whole, axis=0)
        out = np.maximum(out, whole)
    return out


def _reached(conf: I1, rule: Span, x: F8) -> I1:
    """Return 1 for every output figure whose span of input periods holds a hidden one, shape of the output."""
    spans = rule.plan(x)
    until = np.vstack([np.zeros((1, conf.shape[1]), np.int64), np.cumsum(conf > 0, axis=0)])
    first, n = np.maximum(spans.first, 0), np.arange(conf.shape[1])
    step = 1 if spans.step is None else spans.step
    last = np.minimum(first + (spans.length - 1) * step + 1, len(conf))
    return np.asarray((spans.first >= 0) & (until[last, n] > until[first, n]), np.int8)
