"""`report`: the tables of a build as one page of charts."""

from pathlib import Path

import click

from keelbook.cli.common import as_json, dump, reports_errors


@click.command()
@click.argument("place", type=click.Path(path_type=Path))
@click.option(
    "--out",
    type=click.Path(path_type=Path),
    default=Path("report.html"),
    show_default=True,
    help="File to write.",
)
@click.option("--area", "areas", multiple=True, help="Area to show (again for more; the first if not given).")
@click.option("--sector", help="Institutional sector to show (the total economy if not given).")
@as_json
@reports_errors
def report(place: Path, out: Path, areas: tuple[str, ...], sector: str | None, json_: bool) -> None:
    """Write one self-contained page about the build in PLACE: charts, the tables behind them, methods, findings.

    It is made from the published panel alone and needs no network to be read.
    """
    from keelbook.outputs.report import write_report

    written = write_report(place, out, areas, sector)
    if json_:
        dump(
            {
                "file": str(written.file),
                "build_id": written.build_id,
                "areas": list(written.areas),
                "sector": written.sector,
            }
        )
        return
    click.echo(
        f"wrote {written.file} (build {written.build_id}; {', '.join(written.areas)}, {written.sector})"
    )
