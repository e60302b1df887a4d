"""`keelbook`: the commands, thin. Only click is imported here; every command imports what it needs when run."""

import click

from keelbook.cli.assemble import assemble, screen
from keelbook.cli.audit import trace, verify
from keelbook.cli.catalogue import methods
from keelbook.cli.report import report
from keelbook.cli.results import decompose
from keelbook.cli.start import new


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(package_name="keelbook", message="%(prog)s %(version)s")
def main() -> None:
    """Prepare the inputs of a productivity account: from files as received to a panel that explains itself.

    Exit codes: 0 done; 1 internal error; 2 usage or declaration; 3 a source is not there yet; 4 another run holds
    the lock; 5 a stop finding (or a warn under --strict), or a figure that does not reproduce.
    """


for command in (new, assemble, screen, decompose, report, trace, verify, methods):
    main.add_command(command)
