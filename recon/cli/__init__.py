"""The command line: one verb per stage of the job, one file per verb."""

from __future__ import annotations

import sys
import warnings

import click

from recon.cli import (
    calibrate,
    convert,
    demo,
    hand_over,
    import_counts,
    make_protocol,
    make_specimen,
    plan,
    quantify,
    reconstruct,
    report,
    show,
    simulate,
    what_if,
)
from recon.errors import InputError, InputWarning

VERBS = (
    demo.verb,
    make_specimen.verb,
    make_protocol.verb,
    plan.verb,
    what_if.verb,
    simulate.verb,
    import_counts.verb,
    convert.verb,
    calibrate.verb,
    reconstruct.verb,
    quantify.verb,
    report.verb,
    hand_over.verb,
    show.verb,
)


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="nearspin")
def nearspin() -> None:
    """Spectroscopic images from a diamond sensor under a thin slice.

    Describe instrument and specimen, choose encodings, simulate or take a record, reconstruct,
    hand over. Research use only, not for diagnosis.
    """


for _verb in VERBS:
    nearspin.add_command(_verb)


def main(arguments: list[str] | None = None) -> None:
    """Run a verb. A mistake in the input is one line on standard error and exit code 2."""
    warnings.showwarning = _say_warning
    warnings.simplefilter("always", InputWarning)
    try:
        nearspin.main(arguments, standalone_mode=False)
    except InputError as error:
        sys.exit(_fail(str(error)))
    except click.ClickException as error:
        sys.exit(_fail(error.format_message()))
    except (KeyboardInterrupt, click.Abort):
        click.echo("interrupted; nothing half-written is left", err=True)
        sys.exit(130)
    except MemoryError:
        sys.exit(_fail("the machine has not enough memory; use fewer voxels, species or shots"))


def _fail(message: str) -> int:
    for line in message.splitlines():
        click.echo(f"nearspin: {line}", err=True)
    return 2


def _say_warning(message: object, category: type[Warning], *_: object, **__: object) -> None:
    if issubclass(category, InputWarning):
        click.echo(f"nearspin: warning: {message}", err=True)
