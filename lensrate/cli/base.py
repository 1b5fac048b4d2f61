"""What all commands share: negative numbers as arguments, helpful names, and the notice before compiling."""

import re

import click

from ..errors import did_you_mean
from .complete import completed

__all__ = ["Command", "Group", "announce"]

_NEGATIVE = re.compile(r"-(\d|\.\d|inf|nan)", re.IGNORECASE)


class Command(click.Command):
    """A command whose arguments may be negative numbers, typed as they are: ``lensrate sightline 1.0 -3.9``."""

    def __init__(self, name, *args, **kwargs):
        super().__init__(name, *args, **kwargs)
        completed(name, self.params)

    def parse_args(self, ctx, args):
        needed = any(isinstance(p, click.Argument) and p.required for p in self.params)
        if not args and needed and not ctx.resilient_parsing:
            args = ["--help"]
        return super().parse_args(ctx, self._negatives_last(args, ctx))

    def _negatives_last(self, args, ctx):
        """Move positional words behind ``--`` so that click does not take -3.9 for an option."""
        takes = {}
        for p in self.params:
            if isinstance(p, click.Option):
                for name in (*p.opts, *p.secondary_opts):
                    takes[name] = 0 if p.is_flag or p.count else p.nargs
        options, words, i = [], [], 0
        while i < len(args):
            word = args[i]
            if word == "--":
                words += args[i + 1 :]
                break
            if word.startswith("-") and len(word) > 1 and not _NEGATIVE.match(word):
                n = takes.get(word, 0)
                if len(args) - i - 1 < n and not ctx.resilient_parsing:
                    # told here, since what is put behind would be taken for the value
                    some = "an argument" if n == 1 else f"{n} arguments"
                    raise click.BadOptionUsage(word, f"Option '{word}' requires {some}.", ctx)
                options += args[i : i + 1 + n]
                i += 1 + n
            else:
                words.append(word)
                i += 1
        return [*options, "--", *words] if words else options


class Group(click.Group):
    """A group that names the nearest command for a mistyped one."""

    command_class = Command

    def resolve_command(self, ctx, args):
        name = args[0]
        if not name.startswith("-") and self.get_command(ctx, name) is None:
            known = self.list_commands(ctx)
            raise click.UsageError(f"no command '{name}'{did_you_mean(name, known)} (known: {', '.join(known)})", ctx)
        return super().resolve_command(ctx, args)


def announce(quiet):
    """Say on stderr that the kernels will be compiled, where no compiled ones are kept yet."""
    from ..kernels._jit import CACHE

    if not quiet and not any(CACHE.rglob("*.nbi")):
        click.echo("lensrate: compiling kernels, once per installation (about half a minute) ...", err=True)
