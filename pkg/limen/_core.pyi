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
def pack(
    x: NDArray[np.generic],
    levels: NDArray[np.float64],
    codes: NDArray[np.uint8],
    out: NDArray[np.uint8],
    big: bool = False,
    nan_bit: bool = False,
    threads: int = 1,
) -> int: ...
def tally(
    x: NDArray[np.generic],
    levels: NDArray[np.float64],
    codes: NDArray[np.uint8],
    counts: NDArray[np.int64],
    truth: NDArray[np.integer] | None = None,
    store: NDArray[np.uint8] | None = None,
    threads: int = 1,
) -> None: ...
def hysteresis(
    x: NDArray[np.generic],
    levels: NDArray[np.float64],
    widths: NDArray[np.float64],
    codes: NDArray[np.uint8],
    intervals: NDArray[np.uint8],
    invalid: int = 255,
    out: NDArray[np.uint8] | None = None,
) -> NDArray[np.uint8]: ...
def channels(
    x: NDArray[np.generic],
    levels: NDArray[np.float64],
    codes: NDArray[np.uint8],
    out: NDArray[np.uint8],
    invalid: int = 255,
    threads: int = 1,
) -> NDArray[np.uint8]: ...

class Soft:
    def __new__(cls, densities: tuple[object, ...], priors: object = None, state: int = 0) -> Soft: ...
    def values(
        self, x: NDArray[np.generic], out: NDArray[np.generic], step: float = 1.0, threads: int = 1
    ) -> NDArray[np.generic]: ...
    def exact(self, x: object, /) -> NDArray[np.float64]: ...
    @property
    def segments(self) -> int: ...
    @property
    def span(self) -> tuple[float, float]: ...
