"""`assemble` and `screen`: run the declared production, or only look at its sources."""

import sys
from pathlib import Path

import click

from keelbook.cli.common import as_json, dump, end_of_steps, narrator, reports_errors


@click.command()
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--out", type=click.Path(path_type=Path), help="Build folder (FOLDER/build if not given).")
@click.option("--strict", is_flag=True, help="Treat a warn finding like a stop.")
@click.option("--quiet", is_flag=True, help="Do not tell the steps on standard error.")
@click.option("--log-json", is_flag=True, help="Tell the steps as JSON lines on standard error.")
@as_json
@reports_errors
def assemble(folder: Path, out: Path | None, strict: bool, quiet: bool, log_json: bool, json_: bool) -> None:
    """Build the assembly in FOLDER and publish the result, all or nothing."""
    from keelbook.assembly.run import assemble as run
    from keelbook.outputs.summary import summary

    quiet = quiet or json_
    report = run(folder, out, strict=strict, narrate=narrator(quiet, log_json))
    end_of_steps(quiet, log_json)
    if json_:
        dump(
            {
                "build_id": report.identity.build_id,
                "folder": str(report.folder),
                "unchanged": report.unchanged,
                "sources": report.counts.to_dict("records"),
                "stages": report.stages.to_dict("records"),
                "findings": report.findings.astype(object)
                .where(report.findings.notna(), None)
                .to_dict("records"),
                "seconds": report.seconds,
            }
        )
        return
    for line in summary(report, out or folder):
        click.echo(line)


@click.command()
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--strict", is_flag=True, help="Treat a warn finding like a stop.")
@as_json
@reports_errors
def screen(folder: Path, strict: bool, json_: bool) -> None:
    """Read and screen the sources of the assembly in FOLDER; write nothing."""
    from keelbook.assembly.run import as_problem, raise_if_refused, screen_only
    from keelbook.errors import StopFindings
    from keelbook.outputs.text import plural, shown

    assembly, taken, found = screen_only(folder)
    if json_:
        dump(
            {
                "sources": taken.counts.to_dict("records"),
                "findings": found.astype(object).where(found.notna(), None).to_dict("records"),
            }
        )
    else:
        counts = taken.counts.sum(numeric_only=True)
        click.echo(
            f"{shown(assembly.title)}: {plural(len(taken.counts), 'source')}, {int(counts['cells']):,} cells = "
            f"{int(counts['observations']):,} observations + {int(counts['rejected']):,} rejected + "
            f"{int(counts['missing']):,} declared missing"
        )
        for row in found[found["severity"] != "stop"].to_dict("records"):
            click.echo(shown_lines(str(as_problem(row))))
        if not len(found):
            click.echo("no findings")
    try:
        raise_if_refused(found, strict, folder)
    except StopFindings as error:
        if not json_:
            raise
        # The findings are in the JSON already: a second document would make it unreadable.
        sys.exit(error.exit_code)


def shown_lines(text: str) -> str:
    """Return text of several lines with every other control character escaped."""
    from keelbook.outputs.text import shown

    return "\n".join(shown(line) for line in text.splitlines())
