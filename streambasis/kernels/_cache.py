"""Where compiled kernels are kept between processes, so that nothing that happens there can harm.

What the compiler's own cache was measured to do wrong: an unwritable folder raises at import, a
full disk at the first call, a damaged file for ever; an edited kernel leaves the callers of it in
other files as they were; a flipped bit in machine code is run. Here a failure to keep or to find
compiled code costs a compilation and one warning per process, nothing else.
"""

from __future__ import annotations

import contextlib
import functools
import hashlib
import os
import pickle
import secrets
import sys
import threading
import warnings
from collections.abc import Iterator
from importlib import metadata
from pathlib import Path
from typing import Any

SETTING = "STREAMBASIS_CACHE_DIR"
"""Environment variable that names the folder; without it NUMBA_CACHE_DIR, the folder of the
package and the user's cache folder are tried in turn."""

SUFFIX = ".kernel"
_DIGEST = hashlib.sha256
_MAGIC = b"streambasis kernel 1\n"


class CacheWarning(UserWarning):
    """Compiled kernels cannot be kept or found again; all works on, but starts more slowly."""


_warned = threading.Event()


def warn_once(problem: str) -> None:
    """Say once per process that kernels are compiled anew, why, and what to do."""
    if not _warned.is_set():
        _warned.set()
        warnings.warn(
            f"compiled kernels are not kept ({problem}); everything works, but the first calls of "
            f"a process compile for some seconds. Set {SETTING} to a writable folder",
            CacheWarning,
            stacklevel=2,
        )


def candidates() -> Iterator[Path]:
    """Yield the folders in which compiled kernels are looked for, the most wanted first."""
    for name in (SETTING, "NUMBA_CACHE_DIR"):
        if os.environ.get(name):
            yield Path(os.environ[name])
    yield Path(__file__).parent / "__pycache__"
    home = os.environ.get("XDG_CACHE_HOME")
    with contextlib.suppress(RuntimeError):  # no home is known for this user
        yield (Path(home) if home else Path.home() / ".cache") / "streambasis"


@functools.cache
def source_stamp() -> str:
    """Return a digest over all kernel files.

    A kernel is compiled together with those that it calls, wherever they are: an edit in any file
    makes all that was compiled before stale.
    """
    digest = _DIGEST()
    for path in sorted(Path(__file__).parent.glob("*.py")):
        digest.update(path.name.encode() + b"\0" + path.read_bytes() + b"\0")
    return digest.hexdigest()


@functools.cache
def environment() -> str:
    """Return what compiled code depends on beside its source and its processor."""
    import numba
    import numpy as np
    from numba.core import config

    settings = ("BOUNDSCHECK", "OPT", "LOOP_VECTORIZE", "SLP_VECTORIZE", "ENABLE_AVX")
    switches = [f"{name}={getattr(config, name, None)}" for name in settings]
    versions = [sys.version, numba.__version__, metadata.version("llvmlite"), np.__version__]
    # two installations that share a folder do not remove each other's files
    return "\n".join([*versions, *switches, str(Path(__file__).parent)])


class KernelCache:
    """The compiled versions of one kernel on disk, one sealed file each.

    It stands in for the cache object of a numba dispatcher, of which only ``load_overload`` and
    ``save_overload`` are called when a kernel is compiled.

    Parameters
    ----------
    function : function
        The kernel before it is compiled.

    Notes
    -----
    A file is written beside its place and moved there, so that readers and other writers see a
    whole file or none. Its name holds a digest over everything that the code depends on; it starts
    with the SHA-256 of its content, and is not unpickled, let alone run, where that differs.
    """

    def __init__(self, function: Any) -> None:
        self._name = f"{function.__module__}.{function.__qualname__}".replace("<locals>.", "")
        code = function.__code__
        self._code = f"{code.co_code.hex()} {code.co_consts} {code.co_names}"

    @property
    def cache_path(self) -> str:
        """The folder in use."""
        return str(next(candidates()))

    def enable(self) -> None:
        """Do nothing: a dispatcher calls this when caching is asked for."""

    def disable(self) -> None:
        """Do nothing: the cache of a kernel stays on."""

    def flush(self) -> None:
        """Remove what is kept of this kernel, wherever that is possible."""
        for folder in candidates():
            for path in folder.glob(f"{self._name}-*{SUFFIX}"):
                with contextlib.suppress(OSError):
                    path.unlink()

    def load_overload(self, signature: Any, target: Any) -> Any:
        """Return the compiled version for a signature, or None where it must be compiled."""
        try:
            name = self._file_name(signature, target.codegen())
            for folder in candidates():
                content = self._read(folder / name)
                if content is not None:
                    return self._rebuilt(content, target)
        except Exception as error:  # whatever is wrong with a cache, compiling is the way out
            warn_once(f"reading {self._name}: {error!r}")
        return None

    def _rebuilt(self, content: bytes, target: Any) -> Any:
        from numba.core.compiler import CompileResult

        try:
            return CompileResult._rebuild(target, *pickle.loads(content))
        except Exception:
            # what the compiler knows of NumPy takes longer to load than all our kernels, and has
            # not been needed to take over finished code; where it is, it is loaded
            target.refresh()
            return CompileResult._rebuild(target, *pickle.loads(content))

    def save_overload(self, signature: Any, compiled: Any) -> None:
        """Keep a compiled version in the first folder that takes it."""
        from numba.core.serialize import dumps

        try:
            name = self._file_name(signature, compiled.codegen)
            content = dumps(compiled._reduce())
        except Exception as error:
            warn_once(f"packing {self._name}: {error!r}")
            return
        problems = []
        for folder in candidates():
            try:
                self._write(folder, name, content)
                return
            except OSError as error:
                problems.append(f"{folder}: {error.strerror or error}")
        warn_once("; ".join(problems))

    def _file_name(self, signature: Any, codegen: Any) -> str:
        stamp = _DIGEST(f"{source_stamp()}\n{environment()}".encode()).hexdigest()[:12]
        facts = [str(signature), repr(codegen.magic_tuple()), self._code]
        key = _DIGEST("\n".join(facts).encode()).hexdigest()[:16]
        return f"{self._name}-{stamp}-{key}{SUFFIX}"

    def _read(self, path: Path) -> bytes | None:
        try:
            raw = path.read_bytes()
        except OSError:
            return None  # not there, or not for us: the next folder may have it
        start = len(_MAGIC) + _DIGEST().digest_size
        content = raw[start:]
        if raw[:start] == _MAGIC + _DIGEST(content).digest():
            return content
        warn_once(f"{path} is damaged and is made anew")
        with contextlib.suppress(OSError):
            path.unlink()
        return None

    def _write(self, folder: Path, name: str, content: bytes) -> None:
        folder.mkdir(parents=True, exist_ok=True)
        temporary = folder / f"{name}.{os.getpid()}.{secrets.token_hex(4)}.tmp"
        try:
            with temporary.open("xb") as file:
                file.write(_MAGIC + _DIGEST(content).digest() + content)
            temporary.replace(folder / name)
        except BaseException:
            with contextlib.suppress(OSError):
                temporary.unlink()
            raise
        self._remove_stale(folder, name)

    def _remove_stale(self, folder: Path, name: str) -> None:
        """Remove what this kernel left here when its source or its compiler was another one."""
        if folder != Path(__file__).parent / "__pycache__":
            return  # other installations may share the folder
        kept = name.rsplit("-", 1)[0]
        for path in folder.glob(f"{self._name}-*{SUFFIX}"):
            if not path.name.startswith(kept):
                with contextlib.suppress(OSError):
                    path.unlink()
