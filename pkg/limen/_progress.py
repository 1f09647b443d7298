"""Progress of long work: a bar where somebody looks, a callable where the caller has their own, else nothing."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

__all__ = ["progress_of"]

Progress = bool | Callable[[int, int | None], Any]


def _bar() -> Any:
    """The bar that works here: the notebook's only with ipywidgets, else the terminal's; None if nobody looks."""
    shell = sys.modules.get("IPython")
    kernel = shell is not None and "IPKernelApp" in getattr(shell.get_ipython(), "config", {})
    if kernel:
        try:
            import ipywidgets  # noqa: F401
        except ImportError:
            kernel = False
    if not kernel and not sys.stderr.isatty():
        return None
    try:
        if kernel:
            from tqdm.auto import tqdm
        else:
            from tqdm import tqdm
    except ImportError:
        return None
    return tqdm


@contextmanager
def progress_of(progress: Progress, total: int | None, *, done: int = 0, unit: str = "readings",
                title: str | None = None) -> Iterator[Callable[[int], None]]:
    """A function to be told how much more is done.

    Parameters
    ----------
    progress : bool or callable(done, total)
        True: a bar, when standard error is a terminal or a notebook shows it. A callable gets the running sum.
    total : int or None
        None when it is not known.
    done : int
        What an earlier run did.

    Yields
    ------
    callable(int)
    """
    if callable(progress):
        so_far = done

        def advance(count: int) -> None:
            nonlocal so_far
            so_far += count
            progress(so_far, total)

        yield advance
        return
    bar = _bar() if progress else None
    if bar is None:
        yield lambda count: None
        return
    with bar(total=total, initial=done, unit=f" {unit}", unit_scale=True, desc=title, leave=False) as shown:
        yield shown.update
