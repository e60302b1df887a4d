"""Labour: the index of labour input. With no split of workers by kind it is the index of hours."""

from dataclasses import dataclass

from keelbook.blocks import BlockKey
from keelbook.lineage.derive import derive, given, in_year
from keelbook.lineage.formula import Formula, Role
from keelbook.lineage.primitives import Each
from keelbook.stages.base import CHOSEN, Inputs, Result, Stage, keys, missing_input
from keelbook.stages.totals import TOTAL

HOURS = BlockKey("hours_worked", CHOSEN, "_Z")

HOURS_INDEX = Formula(
    name="hours_index",
    equation="labour input_t = hours_t / hours in the reference year (every hour counts alike)",
    citation="OECD, Measuring Productivity (2001): hours worked without adjustment for composition; from memory",
    roles=(Role("hours"), Role("hours_in_reference_year")),
    build=lambda s: Each(lambda hours, reference: hours / reference),
)

FORMULAS = (HOURS_INDEX,)


@dataclass(frozen=True)
class LabourParams:
    reference_year: int


def run(inputs: Inputs, params: LabourParams) -> Result:
    """Return labour input of every series of hours of all workers."""
    hours = inputs.get(HOURS)
    if hours is None:
        return Result((), [missing_input("labour", HOURS)])
    all_workers = hours.series.is_code("worker_group", TOTAL)
    total = hours.take(all_workers)
    block = derive(
        HOURS_INDEX,
        BlockKey("labour_input", "hours", "index"),
        total.series,
        total.periods,
        {"hours": given(total), "hours_in_reference_year": in_year(total, params.reference_year)},
        part=False,
    )
    return Result((block,))


STAGE = Stage(
    name="labour",
    needs=frozenset(),
    optional=keys("hours_worked/*/_Z"),
    gives=keys("labour_input/hours/index"),
    scope="area",
    run=run,
    formulas=FORMULAS,
)
