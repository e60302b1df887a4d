"""`trace` and `verify`: explain one figure, or re-perform many and check the files."""

from pathlib import Path

import click

from keelbook.cli.common import as_json, dump, reports_errors


@click.command()
@click.argument("place", type=click.Path(path_type=Path))
@click.argument("measure")
@click.option("--year", "--period", "year", type=int, required=True, help="Year of the figure.")
@click.option("--area", help="Area code.")
@click.option("--sector", help="Institutional sector (S1, S11, ...).")
@click.option("--industry", help="Industry (ISIC section, _T for the total).")
@click.option("--asset", help="Asset (N11, N112, ..., _T for the total).")
@click.option("--worker-group", help="Worker group (SAL, SELF, ..., _T for the total).")
@click.option("--method", help="Method of the measure (the chosen one if not given).")
@click.option("--price-basis", help="Price basis (current, constant, year_end, index, ...).")
@click.option(
    "--depth", type=click.IntRange(1), default=1, show_default=True, help="Levels shown with all branches."
)
@click.option("--all", "every_term", is_flag=True, help="Show every term, not only the largest.")
@as_json
@reports_errors
def trace(
    place: Path, measure: str, year: int, area: str | None, sector: str | None, industry: str | None,
    asset: str | None, worker_group: str | None, method: str | None, price_basis: str | None, depth: int,
    every_term: bool, json_: bool,
) -> None:  # fmt: skip
    """Explain one figure of MEASURE in PLACE: formula, terms, parameters, and the way down to the source cell.

    The figure and everything on the way is computed again from the stored inputs; a difference ends with code 5.
    """
    from keelbook.audit.reading import Build
    from keelbook.audit.trace import find, must_reproduce
    from keelbook.audit.trace import trace as re_perform
    from keelbook.outputs import trace_text

    wanted = {
        "area": area,
        "sector": sector,
        "industry": industry,
        "asset": asset,
        "worker_group": worker_group,
        "method": method,
        "price_basis": price_basis,
    }
    with Build(place) as build:
        traced = re_perform(build, find(build, measure, wanted), year)
        must_reproduce(traced)
        if json_:
            dump(trace_text.as_json(build, traced, depth))
            return
        for line in trace_text.lines(build, traced, depth, every_term):
            click.echo(line)


@click.command()
@click.argument("place", type=click.Path(path_type=Path))
@click.option(
    "--figures",
    type=click.IntRange(1),
    default=20,
    show_default=True,
    help="Figures of each measure and method.",
)
@click.option("--every", is_flag=True, help="Re-perform every figure.")
@as_json
@reports_errors
def verify(place: Path, figures: int, every: bool, json_: bool) -> None:
    """Check the files of PLACE against their hashes and re-perform figures from their stored inputs."""
    from keelbook.audit.verify import verify as check

    result = check(place, None if every else figures)
    if json_:
        dump(result)
        return
    click.echo(f"{result['files']} files agree with {result['manifest']}")
    click.echo(f"{result['figures']:,} figures of {result['measures']} measures re-performed, all as stored")
