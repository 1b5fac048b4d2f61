"""The command line: one file a command, each importing only click until it runs."""

import errno
import gc
import os
import sys

import click

from .._version import __version__
from ..errors import InputError, LensrateError
from .base import Group
from .campaign import campaign
from .census import census
from .compare import compare
from .constrain import constrain
from .events import events
from .interrupts import held, words_of
from .odds import odds
from .scenario import scenario
from .sightline import sightline
from .skymap import skymap
from .spread import spread
from .synthesize import synthesize
from .verify import verify

__all__ = ["cli", "main"]

# what the system answers to writing alone: disk full, file too large, quota used up, read-only
_WRITING = (errno.ENOSPC, errno.EFBIG, errno.EDQUOT, errno.EROFS)


@click.group(cls=Group, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="lensrate", message="%(prog)s %(version)s")
def cli():
    """Microlensing optical depths, event rates and timescales of stars and dark remnants.

    \b
    Examples:
      lensrate sightline 1.0 -3.9
      lensrate sightline 1.0 -2.9 --extinction I=1.25 --plot m01.png
      lensrate scenario default
    """


for command in (
    sightline, skymap, campaign, events, spread, census, compare, constrain, odds, synthesize, scenario, verify,
):  # fmt: skip
    cli.add_command(command)


def _interrupted(error):
    _complain(words_of(error))
    sys.exit(130)


def main(args=None):
    """Run the command line; exit code 0 done, 1 failed run, 2 wrong input, 130 interrupted."""
    # loading libraries makes a million objects that stay: looking through them for garbage takes a tenth of a forecast
    gc.set_threshold(20_000, 10, 10)
    try:
        # without its standalone mode click returns the code that a command exits with
        code = cli.main(args=args, prog_name="lensrate", standalone_mode=False)
        sys.stdout.flush()
        sys.exit(code if isinstance(code, int) else 0)
    except click.ClickException as error:
        error.show(sys.stderr)
        sys.exit(error.exit_code)
    except (click.Abort, KeyboardInterrupt) as error:
        _interrupted(error)
    except SystemError as error:
        # compiled code that Ctrl-C meets on its way out says so in its own manner
        if not held(error):
            raise
        _interrupted(error)
    except BrokenPipeError:
        # the reader of our output went away, as `head` does
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        sys.exit(0)
    except InputError as error:
        _complain(error)
        sys.exit(2)
    except LensrateError as error:
        _complain(error)
        sys.exit(1)
    except OSError as error:
        _complain(_of_the_system(error))
        sys.exit(1)
    except MemoryError:
        _complain("not enough memory for this run; take fewer sightlines at a time or a larger step_dex")
        sys.exit(1)


def _of_the_system(error):
    """What the system complains of: which file, and that it was one to write only where that is sure."""
    words = error.strerror or str(error) or type(error).__name__
    if error.filename is not None:
        name = os.fsdecode(error.filename) if isinstance(error.filename, bytes) else error.filename
        return f"{name}: could not be written ({words})" if error.errno in _WRITING else f"{name}: {words}"
    return f"output could not be written ({words})" if error.errno in _WRITING else words


def _complain(text):
    line = " ".join(str(text).split())
    # names from files may hold control characters: a terminal must not obey them
    click.echo("lensrate: " + "".join(c if c.isprintable() else f"\\x{ord(c):02x}" for c in line), err=True)
