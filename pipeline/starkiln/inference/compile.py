"""How every kernel is compiled, and where its machine code is kept."""

from __future__ import annotations

import gc
import hashlib
import os
import shutil
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numba
from numba.core import config, types
from numba.core.caching import FunctionCache
from numba.core.codegen import JITCodeLibrary
from numba.core.compiler import Compiler
from numba.core.registry import CPUDispatcher
from numba.core.sigutils import normalize_signature

ROOM_BYTES = 50_000_000
"""A cache takes a few megabytes; a disk that has less than this is not ours to fill."""


def _source_hash() -> str:
    # numba looks only at a function's own file for staleness; one folder per state of all the
    # kernel sources also catches a change in an imported helper.
    digest = hashlib.sha256(numba.__version__.encode())
    for path in sorted(Path(__file__).parent.glob("*.py")):
        digest.update(path.read_bytes())
    return digest.hexdigest()[:16]


def _cache_folder() -> Path | None:
    """Return a private, writable folder for compiled kernels, or None where there is none."""
    bases = [os.environ.get("STARKILN_KERNEL_CACHE"), os.environ.get("XDG_CACHE_HOME")]
    home = os.path.expanduser("~")
    if home != "~":
        bases.append(os.path.join(home, ".cache"))
    parents = [Path(base) / "starkiln" for base in bases if base]
    parents.append(Path(tempfile.gettempdir()) / f"starkiln-{os.getuid()}")
    for parent in parents:
        folder = parent / f"kernels-{_source_hash()}"
        try:
            parent.mkdir(parents=True, exist_ok=True, mode=0o700)
            folder.mkdir(exist_ok=True, mode=0o700)
            tempfile.TemporaryFile(dir=folder).close()
        except OSError:
            continue
        if _is_private(parent) and _is_private(folder) and _has_room(folder):
            return folder
    return None


def _has_room(folder: Path) -> bool:
    return any(folder.iterdir()) or shutil.disk_usage(folder).free >= ROOM_BYTES


def _is_private(folder: Path) -> bool:
    # Compiled code is run without question, so nobody else may be able to put any there.
    status = folder.stat()
    return status.st_uid == os.getuid() and not status.st_mode & 0o002


CACHE_FOLDER = _cache_folder()
if CACHE_FOLDER is not None:
    config.CACHE_DIR = str(CACHE_FOLDER)  # type: ignore[attr-defined]
FOUND_EMPTY = CACHE_FOLDER is not None and not any(CACHE_FOLDER.iterdir())
"""Whether every kernel must be compiled first, by this process or one beside it."""

OPTIONS = {"nopython": True, "nogil": True, "error_model": "numpy", "no_cfunc_wrapper": True}

_KERNELS: list[Any] = []


class _MendingCache(FunctionCache):
    """Keeps machine code in files, starts over where they are damaged, and does without where the disk is full."""

    def load_overload(self, sig: Any, target_context: Any) -> Any:
        try:
            found = super().load_overload(sig, target_context)
        except Exception:  # a damaged pickle raises anything
            shutil.rmtree(self.cache_path, ignore_errors=True)
            return None
        # Processes that compile for different types at once may give their files one name.
        fits = found is not None and found.signature.args == normalize_signature(sig)[0]
        return found if fits else None

    def save_overload(self, sig: Any, data: Any) -> None:
        try:
            super().save_overload(sig, data)
        except OSError:
            return


class _PartLibrary(JITCodeLibrary):
    """Code of a kernel that other kernels call: optimised and made machine code there, not by itself as well."""

    def _optimize_final_module(self) -> None:
        pass

    def _finalize_final_module(self) -> None:
        self._finalize_dynamic_globals()
        self._finalized = True


class _PartCompiler(Compiler):
    """Compiles a kernel for other kernels to link."""

    def __init__(self, typingctx: Any, targetctx: Any, library: Any, *others: Any) -> None:
        library = _PartLibrary(targetctx.codegen(), "part")
        super().__init__(typingctx, targetctx, library, *others)
        self.state.flags.no_compile = True

    def compile_extra(self, func: Callable[..., Any]) -> Any:
        """Compile a function, and let kernels that are lowered later find it."""
        # There is nothing for Python to enter; what stands for it is only a key.
        result = super().compile_extra(func)._replace(entry_point=object())
        self.state.targetctx.insert_user_function(result.entry_point, result.fndesc, [result.library])
        return result


class _Part(CPUDispatcher):
    """A kernel as other kernels call it."""

    def add_overload(self, cres: Any) -> None:
        # The inherited one also tells the entry point to the interpreter.
        self.overloads[tuple(cres.signature.args)] = cres


class _Kernel(CPUDispatcher):
    """A kernel as Python calls it, and beside it the same as other kernels call it."""

    def __init__(self, function: Callable[..., Any], options: dict[str, Any], *, cached: bool = True) -> None:
        super().__init__(function, targetoptions=options)
        options = options | {"no_cpython_wrapper": True, "no_cfunc_wrapper": True}
        self._part = _Part(function, targetoptions=options, pipeline_class=_PartCompiler)
        if cached and CACHE_FOLDER is not None:
            # What njit(cache=True) does, with a cache of our own.
            self._cache = _MendingCache(function)

    def compile(self, sig: Any) -> Any:
        """Compile for some types, or load what was compiled for them."""
        # Compiling makes millions of objects, which the collector would look through again and again.
        collects = gc.isenabled()
        gc.disable()
        try:
            return super().compile(sig)
        finally:
            if collects:
                gc.enable()

    @property
    def _numba_type_(self) -> types.Dispatcher:
        return types.Dispatcher(self._part)


def kernel(function: Callable[..., Any]) -> Any:
    """Compile a function to machine code without the interpreter lock and without fast-math."""
    dispatcher = _Kernel(function, OPTIONS)
    _KERNELS.append(dispatcher)
    return dispatcher


def inlined(function: Callable[..., Any]) -> Any:
    """Compile a small helper that kernels inline; it has no cache entry of its own."""
    return _Kernel(function, OPTIONS | {"forceinline": True}, cached=False)


def compilations() -> int:
    """Return how many times this process has compiled a kernel because it found no machine code of it."""
    return sum(sum(each.stats.cache_misses.values()) for each in _KERNELS)


def loads() -> int:
    """Return how many times this process has found machine code of a kernel in the cache."""
    return sum(sum(each.stats.cache_hits.values()) for each in _KERNELS)


def signatures() -> dict[str, list[str]]:
    """Return the types that each kernel is compiled for, or loaded, in this process, by the kernel's name."""
    return {f"{each.__module__}.{each.__name__}": [str(kind) for kind in each.signatures] for each in _KERNELS}
