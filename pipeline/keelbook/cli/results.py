"""`decompose`: print the growth decomposition that a build stored."""

from pathlib import Path

import click

from keelbook.cli.common import as_json, dump, reports_errors


@click.command()
@click.argument("place", type=click.Path(path_type=Path))
@click.option("--area", help="Area code (needed for the yearly table when there are several).")
@click.option("--sector", default="S1", show_default=True, help="Institutional sector.")
@click.option("--industry", default="_T", show_default=True, help="Industry of the yearly table.")
@click.option(
    "--form", type=click.Choice(["log", "discrete"]), help="Form of growth (the chosen one if not given)."
)
@click.option("--from", "first", type=int, help="First year of growth in the averages.")
@click.option("--to", "last", type=int, help="Last year of growth in the averages.")
@as_json
@reports_errors
def decompose(
    place: Path, area: str | None, sector: str, industry: str, form: str | None, first: int | None,
    last: int | None, json_: bool,
) -> None:  # fmt: skip
    """Print growth, contributions, the residual, its level and its three readings, as stored in PLACE."""
    from keelbook.audit.reading import Build
    from keelbook.outputs import decomposition as stored
    from keelbook.outputs.text import shown

    with Build(place) as build:
        rows = stored.averages(build, form, first, last)
        key = {"area": area or str(build.facts["area"]), "sector": sector, "industry": industry}
        years = stored.yearly(build, key, form)
        if json_:
            dump({"averages": rows, "yearly": {**key, "rows": years}})
            return
        click.echo(shown(str(build.facts["title"])))
        if not rows:
            click.echo("no decomposition was computed:")
            for message, count in build.rows(
                "select message, count(*) from finding where rule = 'not_computed' group by message order by message"
            ):
                click.echo(f"  {message}" + (f" ({count} times)" if count > 1 else ""))
            return
        chosen = form or stored.forms(build)[0]
        names = dict(build.rows("select code, name from code where list = 'industry'"))
        click.echo(f"Mean yearly growth, {chosen} form")
        for line in stored.averages_text(rows, {**names, "_T": "total"}):
            click.echo(line)
        click.echo("")
        click.echo(f"{key['area']} {key['industry']} year by year")
        for line in stored.yearly_text(years) if years else [f"no series {key}"]:
            click.echo(line)
        click.echo("")
        for line in stored.NOTES:
            click.echo(line)
