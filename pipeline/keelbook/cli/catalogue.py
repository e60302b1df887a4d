"""`methods`: every formula that figures can be made by."""

import click

from keelbook.cli.common import as_json, dump, reports_errors


@click.command()
@as_json
@reports_errors
def methods(json_: bool) -> None:
    """List every formula: equation, inputs and published source."""
    from keelbook.stages.catalogue import FORMULAS

    rows = [
        {
            "name": f.name,
            "equation": f.equation,
            "inputs": [role.name for role in f.roles],
            "citation": f.citation,
        }
        for f in FORMULAS.values()
    ]
    if json_:
        dump(rows)
        return
    for row in rows:
        click.echo(f"{row['name']}\n    {row['equation']}\n    source: {row['citation']}")
