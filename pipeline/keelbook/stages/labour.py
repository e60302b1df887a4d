"""Labour: the index of labour input, from hours alone or from hours of groups of workers weighted by their pay."""

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from keelbook.blocks import Block, BlockKey, Choice
from keelbook.lineage.derive import derive, given, in_year
from keelbook.lineage.formula import Formula, Role
from keelbook.lineage.primitives import Each, Sum
from keelbook.stages.base import CHOSEN, Inputs, Result, Stage, keys, missing_input, outer_series
from keelbook.stages.chaining import chained, log_growth, mean_cost_shares
from keelbook.stages.totals import TOTAL, total_of

HOURS = BlockKey("hours_worked", CHOSEN, "_Z")
COMPENSATION = BlockKey("compensation_of_employees", CHOSEN, "current")
COMPOSITION = BlockKey("labour_composition", "delivered", "index")

HOURS_INDEX = Formula(
    name="hours_index",
    equation="labour input_t = hours_t / hours in the reference year (every hour counts alike)",
    citation="OECD, Measuring Productivity (2001): hours without adjustment for composition; from memory",
    roles=(Role("hours"), Role("hours_in_reference_year")),
    build=lambda s: Each(lambda hours, reference: hours / reference),
)

HOURS_OF_GROUPS = Formula(
    name="hours_of_groups",
    equation="hours of a worker group, as a part of labour input",
    citation="a partition of all workers is used whole: groups of two partitions never add up",
    roles=(Role("hours"), Role("compensation", counted=False)),
    build=lambda s: Each(lambda hours, compensation: hours + 0 * compensation),
)

GROWTH = Formula(
    name="labour_input_growth",
    equation="dln L_t = sum_g (s_g,t + s_g,t-1)/2 x ln(h_g,t / h_g,t-1), s_g = compensation of g / sum",
    citation="Törnqvist index of labour input: BLS technical notes; from memory",
    roles=(
        Role("hours"),
        Role("hours_previous", -1),
        Role("compensation", counted=False),
        Role("compensation_previous", -1, counted=False),
    ),
    build=lambda s: Sum(s.groups, value=log_growth, weight=mean_cost_shares, by_weight=True),
    kind="group",
)

INPUT = Formula(
    name="labour_input_chained",
    equation="L_t = exp(sum of growth from the reference year to t), the reference year = 1",
    citation="chained index: ABS, Concepts, Sources and Methods 2020-21, annex on chain volume indexes",
    roles=(Role("growth"),),
    build=lambda s: chained(s, int(s.single("assembly.reference_year"))),
    kind="series",
)

COMPOSITION_OF_GROUPS = Formula(
    name="labour_composition",
    equation="composition_t = labour input_t / index of hours_t",
    citation="OECD, Measuring Productivity (2001); from memory",
    roles=(Role("labour_input"), Role("hours_index")),
    build=lambda s: Each(lambda labour, hours: labour / hours),
)

HOURS_TIMES_COMPOSITION = Formula(
    name="labour_input_from_composition",
    equation="L_t = index of hours_t x delivered index of composition_t / its reference year",
    citation="OECD, Measuring Productivity (2001); from memory",
    roles=(Role("hours_index"), Role("composition"), Role("composition_in_reference_year")),
    build=lambda s: Each(lambda hours, composition, reference: hours * composition / reference),
)

FORMULAS = (HOURS_INDEX, HOURS_OF_GROUPS, GROWTH, INPUT, COMPOSITION_OF_GROUPS, HOURS_TIMES_COMPOSITION)

INPUT_TOTALS = (("worker_group",), ("industry", "worker_group"), ("sector", "worker_group"),
                ("sector", "industry", "worker_group"))  # fmt: skip
"""What an index of labour input runs over: the groups of an industry, of a sector, of an area."""


@dataclass(frozen=True)
class LabourParams:
    """partition_of: worker group -> its partition of all workers."""

    reference_year: Choice
    partition_of: Mapping[str, str]
    partition: Choice


def run(inputs: Inputs, params: LabourParams) -> Result:
    """Return labour input of all workers by every method the data allow; the most detailed one is chosen."""
    hours = inputs.get(HOURS)
    if hours is None:
        return Result((), [missing_input("labour", HOURS)])
    year = int(params.reference_year.value)
    total = hours.take(hours.series.is_code("worker_group", TOTAL))
    index = derive(
        HOURS_INDEX,
        BlockKey("labour_input", "hours", "index"),
        total.series,
        total.periods,
        {"hours": given(total), "hours_in_reference_year": in_year(total, year)},
        part=False,
    )
    blocks: list[Block] = []
    better = [*_of_groups(inputs, hours, index, params), *_of_composition(inputs, index, year)]
    for block in better:
        if block.key.measure == "labour_input":
            index = replace(index, chosen=index.chosen & (block.series.locate(index.series.key) < 0))
    blocks.append(index)
    blocks.extend(better)
    return Result(blocks)


def _of_groups(inputs: Inputs, hours: Block, index: Block, params: LabourParams) -> list[Block]:
    """Return labour input over the groups of the declared partition that have hours and compensation."""
    compensation = inputs.get(COMPENSATION)
    if compensation is None:
        return []
    codes = hours.series.table.codes["worker_group"]
    wanted = np.array([params.partition_of.get(code) == params.partition.value for code in codes])
    mine = wanted[hours.series.digit("worker_group")]
    detail = hours.take(mine & (compensation.series.locate(hours.series.key) >= 0))
    elementary = ~(detail.series.is_code("industry", TOTAL) | _summed_sector(detail))
    detail = detail.take(elementary) if elementary.any() else detail
    if not len(detail.series):
        return []
    groups = derive(
        HOURS_OF_GROUPS,
        BlockKey("hours_worked", "by_group", "_Z"),
        detail.series,
        detail.periods,
        {"hours": given(hours), "compensation": given(compensation)},
        sets=((params.partition,),),
        chosen=False,
    )
    out = [groups]
    done = np.zeros(0, np.int64)
    for dims in INPUT_TOTALS:
        series = outer_series(groups, total_of(*dims))
        series = series.take(~np.isin(series.key, done))
        done = np.concatenate([done, series.key])
        if not len(series):
            continue
        growth = derive(
            GROWTH,
            BlockKey("labour_input_growth", "tornqvist", "_Z"),
            series,
            groups.periods,
            {
                "hours": given(groups),
                "hours_previous": given(groups),
                "compensation": given(compensation),
                "compensation_previous": given(compensation),
            },
            sets=((params.partition,),),
            group=total_of(*dims),
            part=False,
        )
        labour = derive(
            INPUT,
            BlockKey("labour_input", "tornqvist", "index"),
            series,
            groups.periods,
            {"growth": given(growth)},
            sets=((params.reference_year,),),
            part=False,
        )
        labour = labour.take(labour.held)
        composition = derive(
            COMPOSITION_OF_GROUPS,
            BlockKey("labour_composition", "tornqvist", "index"),
            labour.series,
            groups.periods,
            {"labour_input": given(labour), "hours_index": given(index)},
            part=False,
        )
        out.extend([growth, labour, composition])
    return out


def _summed_sector(block: Block) -> np.ndarray:
    """Return which series are of the whole economy while their sectors are there too."""
    whole = block.series.is_code("sector", total_of("sector")["sector"])
    detail = block.series.take(~whole).projected(total_of("sector"))
    return np.asarray(whole & np.isin(block.series.key, detail))


def _of_composition(inputs: Inputs, index: Block, year: int) -> list[Block]:
    """Return hours times a delivered index of composition."""
    composition = inputs.get(COMPOSITION)
    if composition is None:
        return []
    mine = index.take(composition.series.locate(index.series.key) >= 0)
    return [
        derive(
            HOURS_TIMES_COMPOSITION,
            BlockKey("labour_input", "delivered_composition", "index"),
            mine.series,
            mine.periods,
            {
                "hours_index": given(index),
                "composition": given(composition),
                "composition_in_reference_year": in_year(composition, year),
            },
            part=False,
        )
    ]


STAGE = Stage(
    name="labour",
    needs=frozenset(),
    optional=frozenset({HOURS, COMPENSATION, COMPOSITION}),
    gives=keys(
        *(f"labour_input/{method}/index" for method in ("hours", "tornqvist", "delivered_composition")),
        "labour_input_growth/tornqvist/_Z",
        "labour_composition/tornqvist/index",
        "hours_worked/by_group/_Z",
    ),
    scope="area",
    run=run,
    formulas=FORMULAS,
)
