"""How far a long job is, on stderr: a bar that is redrawn on a terminal, a line now and then elsewhere."""

import sys
import time

import click

__all__ = ["Progress", "duration", "size"]

_EVERY = 30.0  # seconds between lines where stderr is no terminal
_REDRAW = 0.2
_WIDTH = 30
_TELLING = 0.004  # share of the work from which the time left is foretold


class Progress:
    """Callable with the shares of the work done and found done before; use as a context manager.

    Parameters
    ----------
    label : str
        Stands before the bar.
    quiet : bool
        Nothing is printed.
    """

    def __init__(self, label, quiet=False):
        self.label, self.quiet = label, quiet
        self.bar = sys.stderr.isatty()
        self.start = self.last = time.monotonic()

    def __enter__(self):
        return self

    def __exit__(self, *_):
        if self.bar and not self.quiet:
            click.echo("", err=True)

    def __call__(self, done, found=0.0):
        now = time.monotonic()
        if self.quiet or (now - self.last < (_REDRAW if self.bar else _EVERY) and done < 1):
            return
        self.last = now
        fresh = done - found
        text = f"{100 * min(done, 1):.0f} %"
        if fresh > _TELLING and done < 1:
            text += f", about {duration((now - self.start) * (1 - done) / fresh)} left"
        if self.bar:
            full = int(_WIDTH * min(done, 1))
            bar = "#" * full + "." * (_WIDTH - full)
            click.echo(f"\r{self.label} [{bar}] {text:<32}", err=True, nl=False)
        else:
            click.echo(f"lensrate: {self.label}: {text}", err=True)


def duration(seconds):
    """Return a time in words that fit its size, for example "4 min"."""
    if seconds < 90:
        return f"{max(seconds, 1):.0f} s"
    return f"{seconds / 60:.0f} min" if seconds < 5400 else f"{seconds / 3600:.1f} h"


def size(n):
    """Return a number of bytes in words, for example "27 MB"."""
    return f"{n / 1e9:.1f} GB" if n >= 1e9 else f"{n / 1e6:.0f} MB"
