"""What a shell may complete: files, folders and the names of shipped sets, told from an option's name and metavar."""

import click
from click.shell_completion import CompletionItem

from ..datafiles import names, sample_names
from ..errors import LensrateError

__all__ = ["completed"]

# options and arguments that take names, with the kind of set and further words
_NAMED = {
    "--scenario": ("scenarios", ()),
    "--kicks": ("kicks", ("none",)),
    "--bh-kicks": ("kicks", ("same", "momentum", "none")),
    "--family": ("families", ()),
    "--spread": ("families", ()),
    "--campaign": ("campaigns", ()),
    "--from": ("campaigns", ()),
    "--fields": ("campaigns", ()),
    "--overlay": ("campaigns", ()),
    "--facilities": ("facilities", ()),
    "--galaxy": ("galaxy", ()),
    ("campaign", "file"): ("campaigns", ()),
    ("scenario", "name"): ("scenarios", ()),
    ("odds", "sample"): ("samples", ()),
    ("compare", "sample"): ("samples", ()),
    ("constrain", "sample"): ("samples", ()),
}
_KINDS = {"FILE": "file", "SAMPLE": "file", "FOLDER": "dir"}


class _Text(click.types.StringParamType):
    """Text that names a file or folder, or one of the shipped sets."""

    def __init__(self, kind, named, words):
        self.kind, self.named, self.words = kind, named, words

    def shell_complete(self, ctx, param, incomplete):
        """Return the names that begin so, and let the shell add its files."""
        # the shell's own files come first: in bash what follows takes precedence where there is any
        out = [CompletionItem(incomplete, type=self.kind)] if self.kind else []
        try:
            shipped = sample_names() if self.named == "samples" else names(self.named) if self.named else ()
            known = [*self.words, *shipped]
        except LensrateError:
            known = []
        return [*out, *(CompletionItem(word) for word in known if word.startswith(incomplete))]


def completed(command, params):
    """Give the parameters of a command that take files or names a type that completes them; returns the parameters."""
    for p in params:
        if not isinstance(p.type, click.types.StringParamType) or p.nargs != 1:
            continue
        keys = p.opts if isinstance(p, click.Option) else [(command, p.name)]
        named, words = next((_NAMED[k] for k in keys if k in _NAMED), ("", ()))
        kind = next((kind for word, kind in _KINDS.items() if word in (p.metavar or "")), "file" if named else "")
        if kind:
            p.type = _Text(kind, named, words)
    return params
