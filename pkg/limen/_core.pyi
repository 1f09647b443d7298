import numpy as np
from numpy.typing import NDArray

__version__: str

def _statuses() -> tuple[tuple[str, str, type[Exception] | None], ...]: ...

decide: np.ufunc

def slice(
    x: NDArray[np.generic],
    levels: NDArray[np.float64],
    codes: NDArray[np.uint8],
    invalid: int = 255,
    out: NDArray[np.uint8] | None = None,
    threads: int = 1,
) -> NDArray[np.uint8]: ...
def threads_available() -> int: ...
def kernels() -> tuple[str, list[str]]: ...
