"""Files written as a whole or not at all."""

from __future__ import annotations

import os
import tempfile
from typing import Any


def replace(path: Any, text: str) -> None:
    """Write a text file in the place of what is there, if anything; a failure leaves that untouched."""
    folder = os.path.dirname(os.path.abspath(path))
    handle, temporary = tempfile.mkstemp(dir=folder, prefix=".limen-")
    try:
        with open(handle, "w", encoding="utf-8") as file:
            file.write(text)
            file.flush()
            os.fsync(handle)
        mask = os.umask(0)
        os.umask(mask)
        os.chmod(temporary, 0o666 & ~mask)
        os.replace(temporary, path)
    except BaseException:
        os.unlink(temporary)
        raise
