"""`new`: start an assembly."""

from pathlib import Path

import click

from keelbook.cli.common import as_json, dump, reports_errors


@click.command()
@click.argument("folder", type=click.Path(path_type=Path))
@as_json
@reports_errors
def new(folder: Path, json_: bool) -> None:
    """Write a commented assembly with small invented sources into FOLDER; it assembles as it stands."""
    from keelbook.assembly.new import write_new

    written = write_new(folder)
    if json_:
        dump([str(path) for path in written])
        return
    for path in written:
        click.echo(f"wrote {path}")
    click.echo(f"next: keelbook assemble {folder}")
