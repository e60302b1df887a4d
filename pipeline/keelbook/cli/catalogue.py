"""`methods`: every method that figures can be made by."""

import click

from keelbook.cli.common import as_json, dump, reports_errors


@click.command()
@as_json
@reports_errors
def methods(json_: bool) -> None:
    """List every formula, profile, retirement pattern and choice: equation, parameters, published source."""
    from keelbook.outputs.catalogue import catalogue, catalogue_lines

    rows = catalogue()
    if json_:
        dump(rows)
        return
    for line in catalogue_lines(rows):
        click.echo(line)
