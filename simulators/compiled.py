"""Choose between the march in numpy and the same march compiled to machine code.

numba compiles it, if installed (the extra "fast"). Loading costs most of a second, and
compiling, once for each version of the sources, about ten: a process chooses once, before its
first pulse, and never changes its mind in between, so that a seed gives the same numbers.
PULSETALLY_JIT in the environment decides for it: 0 forbids what is compiled, 1 wants it always.
"""

import hashlib
import os
import warnings
from collections.abc import Callable
from contextlib import suppress
from functools import cache, partial
from pathlib import Path
from typing import TypeVar

from pulsetally.simulators import march
from pulsetally.simulators.collocation import Equations
from pulsetally.simulators.lot_numbers import Array, LotNumbers, Pieces

March = Callable[
    [
        Equations,
        march.State,
        march.Stride,
        float,
        float,
        float,
        bool,
        march.Stop,
    ],
    march.Course,
]

Compiled = TypeVar("Compiled")

RunLot = Callable[[LotNumbers, Pieces, Array], bool]

ENVIRONMENT_VARIABLE = "PULSETALLY_JIT"
# From so many pulses on, most of which may not come, loading is won back several times over.
WORTH_PULSES = 2000

# What is compiled: after a change in any of them, old machine code is not used again.
_SOURCES = ("cell", "circuit", "collocation", "trajectory", "march", "kernel", "lot_kernel")

_in_use: March | None = None


def march_in_use() -> March:
    """Return the march that this process uses: in numpy, unless something else was said."""
    if _in_use is None:
        use_numpy()
        if os.environ.get(ENVIRONMENT_VARIABLE) == "1":
            use_compiled()
    return _in_use or march.march


def use_numpy() -> None:
    """Use the march in numpy in this process from now on."""
    global _in_use
    _in_use = march.march


def use_compiled(*, pulses: int | None = None) -> bool:
    """Use the compiled march in this process from now on, where that can be; tell whether.

    pulses: how many are to come, None when nobody knows; few are not worth it.
    """
    global _in_use
    worth = pulses is None or pulses >= WORTH_PULSES
    wanted = os.environ.get(ENVIRONMENT_VARIABLE) == "1"
    found = compiled_march() if worth or wanted else None
    if found is not None:
        _in_use = found
    return found is not None


def compiled_march() -> March | None:
    """Load the compiled march, or compile it; None where that is forbidden or impossible.

    Impossible is it without numba, with a numba that does not work here (which is said in
    a warning), and where machine code can't be kept: to compile it anew for each process
    would cost more than it brings.
    """
    return None if os.environ.get(ENVIRONMENT_VARIABLE) == "0" else _load()


def compiled_lot() -> RunLot | None:
    """Load what runs a lot with the compiled march, or compile it; None as compiled_march."""
    return None if os.environ.get(ENVIRONMENT_VARIABLE) == "0" else _load_lot()


@cache
def _load() -> March | None:
    folder = _own_folder()
    if folder is None or os.environ.get("NUMBA_DISABLE_JIT") == "1":
        return None
    try:
        from pulsetally.simulators import kernel
    except ModuleNotFoundError:
        return None
    except ImportError as error:
        _complain(error)
        return None
    try:
        compiled: March = load_or_compile(kernel.compile_march, folder)
        return compiled
    except kernel.CompileErrors as error:
        _complain(error)
        return None


@cache
def _load_lot() -> RunLot | None:
    compiled, folder = _load(), _own_folder()
    if compiled is None or folder is None:
        return None
    from pulsetally.simulators import kernel, lot_kernel

    try:
        run: RunLot = load_or_compile(partial(lot_kernel.compile_lot, compiled), folder)
        return run
    except kernel.CompileErrors as error:
        _complain(error)
        return None


def load_or_compile(compile_in: Callable[[Path], Compiled], folder: Path) -> Compiled:
    """Load what was compiled from a folder, or compile it; if the files there are damaged, anew.

    compile_in: does it with numba's own files, and trusts them. Where a disk was full or the
    power failed they are cut, and reading them back may raise anything at all.
    Raises what compile_in raises in a folder without such files.
    """
    try:
        return compile_in(folder)
    except Exception:
        if not _discard(folder):
            raise
    return compile_in(folder)


def _discard(folder: Path) -> bool:
    """Remove what numba has kept in a folder; tell whether there was anything."""
    # An index first: it names files of code, and without it none is looked for.
    kept = [*folder.rglob("*.nbi"), *folder.rglob("*.nbc")]
    for file in kept:
        # Another process may have been faster.
        with suppress(OSError):
            file.unlink()
    return bool(kept)


def _complain(error: Exception) -> None:
    warnings.warn(
        f"numba can't compile the simulated cell, which is simulated in numpy, slower: {error}",
        RuntimeWarning,
        stacklevel=4,
    )


def cache_folder() -> Path:
    """Return where machine code of these sources is kept.

    In a folder of its own for each version of them: numba would look at one file only.
    """
    digest = hashlib.sha256()
    for name in _SOURCES:
        digest.update(Path(__file__).with_name(f"{name}.py").read_bytes())
    for name in ("NUMBA_CACHE_DIR", "XDG_CACHE_HOME", "LOCALAPPDATA"):
        if root := os.environ.get(name):
            break
    else:
        root = "~/.cache"
    return Path(root).expanduser() / "pulsetally" / digest.hexdigest()[:16]


def _own_folder() -> Path | None:
    try:
        folder = cache_folder()
        folder.mkdir(parents=True, exist_ok=True)
    except (OSError, RuntimeError):
        # No home, or a home where nothing can be written.
        return None
    return folder if os.access(folder, os.W_OK) else None
