"""A progress bar on stderr over the bytes of files, for people; nothing where nobody looks."""

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import click

GZIP_RATIO = 6  # captures are hex text; only the bar depends on it


@contextmanager
def bytes_bar(label: str, files: list[Path]) -> Iterator[Callable[[int], None]]:
    """A callable that is told the bytes of text read. gzip hides the length of its text: estimated."""
    if not sys.stderr.isatty():
        yield lambda _size: None
        return
    total = sum(_text_size(file) for file in files)
    with click.progressbar(length=total, label=label, file=sys.stderr, show_eta=True) as bar:
        yield bar.update


def _text_size(file: Path) -> int:
    size = file.stat().st_size
    return size * GZIP_RATIO if file.suffix == ".gz" else size
