"""Compiled kernels are kept between processes, and nothing that happens to them does harm."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
import warnings
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

import streambasis
from streambasis import CacheWarning, StreamBasis, warm_up
from streambasis.errors import SettingError
from streambasis.kernels import _cache, _jit
from streambasis.kernels.scaling import norm

ROOT = Path(streambasis.__file__).parent.parent

SHIFT = """
from streambasis.kernels._jit import kernel

@kernel()
def shift(x):
    return x + 1.0

@kernel()
def twice(x):
    return shift(x) * 2.0

assert shift(2.0) == 3.0 and twice(2.0) == 6.0
print("hits", sum(shift.stats.cache_hits.values()) + sum(twice.stats.cache_hits.values()))
"""

DIGEST = """
import hashlib
import numpy as np
from streambasis import NoveltyMonitor, StreamBasis, to_bytes
from streambasis.kernels.principal import orthonormal_rows

rng = np.random.default_rng(5)
samples = rng.standard_normal((3000, 3)) @ rng.standard_normal((3, 12))
samples += 0.1 * rng.standard_normal(samples.shape)
monitor = NoveltyMonitor(12, baseline=1000, half_life=1000)
basis = StreamBasis(12, rtol=0.2)
monitor.push_many(samples)
basis.push_many(samples[:500])
for sample in samples[500:1000]:
    basis.push(sample)
digest = hashlib.sha256(to_bytes(monitor) + to_bytes(basis)).hexdigest()
print("loaded" if orthonormal_rows.stats.cache_hits else "compiled", digest)
"""
"""Runs kernels that call others; says whether they were compiled, and a digest of the results."""

CALLS = """
import re
import numpy as np
from streambasis import PrincipalBasis, StreamBasis
from streambasis.kernels import growth, principal, projection

rng = np.random.default_rng(3)
PrincipalBasis(12).push_many(rng.standard_normal((500, 12)))
StreamBasis(12).push(rng.standard_normal(12))
for kernel in (projection.orthogonalize, principal.orthonormal_rows, growth.push_growing):
    found = set()
    for signature in kernel.signatures:
        own = kernel.overloads[signature].fndesc.mangled_name
        calls = re.findall(r'call [^\\n]*?@"?([\\w.$]+)', kernel.inspect_llvm(signature))
        found |= {name for name in calls if "streambasis" in name and own not in name}
    print(kernel.__name__, *found)
"""
"""Names kernels that call others, each with the functions of ours that its code still calls."""


def run(
    script: str, cache: Path | str, *, root: Path = ROOT, **environment: str
) -> subprocess.CompletedProcess[str]:
    """Run a script in a process of its own, its compiled kernels kept in ``cache``."""
    return subprocess.run(
        [sys.executable, "-c", script],
        env=surroundings(cache, root, **environment),
        cwd="/",  # or the first place that Python looks for the package is this one
        capture_output=True,
        text=True,
        check=False,
        timeout=300,
    )


def surroundings(cache: Path | str, root: Path = ROOT, **environment: str) -> dict[str, str]:
    """Return the environment of a process that looks for kernels in ``cache`` first."""
    kept = {k: v for k, v in os.environ.items() if not k.startswith(("NUMBA", "STREAMBASIS"))}
    return {**kept, "PYTHONPATH": str(root), _cache.SETTING: str(cache), **environment}


def kernels_in(folder: Path) -> list[Path]:
    """Return the kept kernels of a folder, and check that nothing else is left there."""
    assert [p.name for p in folder.iterdir() if p.suffix != _cache.SUFFIX] == []
    return sorted(folder.iterdir())


@pytest.fixture(scope="module")
def nowhere(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict[str, str]]:
    """Return an installation that nothing can be written to, and a user without a home.

    A file stands where each folder would be: permissions do not stop the superuser.
    """
    root = tmp_path_factory.mktemp("install")
    shutil.copytree(ROOT / "streambasis", root / "streambasis",
                    ignore=shutil.ignore_patterns("__pycache__"))  # fmt: skip
    (root / "streambasis" / "kernels" / "__pycache__").write_text("no folder")
    blocked = root / "blocked"
    blocked.write_text("no folder")
    return root, {"HOME": str(blocked), "XDG_CACHE_HOME": str(blocked / "cache")}


def test_a_second_process_finds_what_the_first_compiled(tmp_path: Path) -> None:
    """The first process compiles and keeps, the second takes it over, both without a word."""
    for expected in ("hits 0\n", "hits 2\n"):
        done = run(SHIFT, tmp_path)
        assert (done.stdout, done.stderr) == (expected, "")
    assert len(kernels_in(tmp_path)) == 2


def test_a_process_that_compiles_agrees_to_the_last_bit_with_one_that_finds_all_kept(
    tmp_path: Path, nowhere: tuple[Path, dict[str, str]]
) -> None:
    """A run gives the same bits whether its kernels were compiled for it or loaded from disk."""
    root, environment = nowhere
    first, second = (run(DIGEST, tmp_path, root=root, **environment) for _ in range(2))
    assert first.stderr == second.stderr == ""
    assert (first.stdout.split()[0], second.stdout.split()[0]) == ("compiled", "loaded")
    assert first.stdout.split()[1] == second.stdout.split()[1]


def test_no_kernel_calls_another_in_compiled_code(
    tmp_path: Path, nowhere: tuple[Path, dict[str, str]]
) -> None:
    """What a kernel calls is part of its own code, so that no linker chooses among copies."""
    root, environment = nowhere
    done = run(CALLS, tmp_path, root=root, **environment)
    assert (done.stdout, done.stderr) == ("orthogonalize\northonormal_rows\npush_growing\n", "")


def test_other_compiler_settings_are_other_code(tmp_path: Path) -> None:
    """What was compiled without bounds checks is not taken for what has them."""
    run(SHIFT, tmp_path)
    assert run(SHIFT, tmp_path, NUMBA_BOUNDSCHECK="1").stdout == "hits 0\n"
    assert len(kernels_in(tmp_path)) == 4


def test_without_a_writable_folder_all_works_with_one_warning(
    nowhere: tuple[Path, dict[str, str]],
) -> None:
    """A read-only installation and an unwritable home cost one warning, not an error."""
    root, environment = nowhere
    done = run("import streambasis; streambasis.StreamBasis" + SHIFT, "/dev/null/cache",
               root=root, **environment)  # fmt: skip
    assert done.stdout == "hits 0\n", done.stderr
    assert done.stderr.count("CacheWarning") == 1
    assert f"Set {_cache.SETTING} to a writable folder" in done.stderr
    quiet = run("import streambasis.kernels.growth", "/dev/null/cache", root=root, **environment)
    assert (quiet.returncode, quiet.stderr) == (0, "")


def test_a_full_disk_costs_one_warning_and_leaves_no_debris(
    tmp_path: Path, nowhere: tuple[Path, dict[str, str]]
) -> None:
    """A write that fails midway (a limit on the file size, as a full disk would) is survived."""
    root, environment = nowhere
    limit = "import resource; resource.setrlimit(resource.RLIMIT_FSIZE, (4096, 4096))\n"
    done = run(limit + SHIFT, tmp_path, root=root, **environment)
    assert done.stdout == "hits 0\n", done.stderr
    assert done.stderr.count("CacheWarning") == 1
    assert kernels_in(tmp_path) == []


def damaged(raw: bytes) -> dict[str, bytes]:
    """Return a file as different accidents would leave it."""
    middle = len(raw) // 2
    content = b"sealed, but no kernel"
    return {
        "flipped": raw[:middle] + bytes([raw[middle] ^ 4]) + raw[middle + 1 :],
        "truncated": raw[:-100],
        "empty": b"",
        "zeroed": raw[:-512] + bytes(512),
        "foreign": _cache._MAGIC + _cache._DIGEST(content).digest() + content,
    }


def test_a_damaged_file_is_never_run(tmp_path: Path) -> None:
    """Whatever happened to a file, it is noticed, said once, compiled anew and replaced."""
    run(SHIFT, tmp_path)
    whole = {path: path.read_bytes() for path in kernels_in(tmp_path)}
    for damage in damaged(b" " * 1024):
        for path, raw in whole.items():
            path.write_bytes(damaged(raw)[damage])
        done = run(SHIFT, tmp_path)
        assert done.stdout == "hits 0\n", done.stderr
        assert done.stderr.count("CacheWarning") == 1, damage
    again = run(SHIFT, tmp_path)
    assert (again.stdout, again.stderr) == ("hits 2\n", "")


def test_an_edited_kernel_makes_its_callers_stale(tmp_path: Path) -> None:
    """A kernel in one file that calls one in another is compiled anew when that is edited."""
    shutil.copytree(ROOT / "streambasis", tmp_path / "streambasis",
                    ignore=shutil.ignore_patterns("__pycache__"))  # fmt: skip
    folder = tmp_path / "streambasis" / "kernels"
    head = "from streambasis.kernels._jit import kernel\n"
    (folder / "caller.py").write_text(
        f"{head}from streambasis.kernels.callee import base\n\n\n@kernel()\ndef total(x):\n"
        "    return base(x) + 1.0\n"
    )
    script = "from streambasis.kernels.caller import total; print(total(1.0))"
    for factor in (10, 20):
        (folder / "callee.py").write_text(
            f"{head}\n\n@kernel()\ndef base(x):\n    return x * {factor}.0\n"
        )
        done = run(script, "", root=tmp_path)
        assert (done.stdout, done.stderr) == (f"{factor + 1}.0\n", "")
    names = [p.name for p in (folder / "__pycache__").glob(f"*{_cache.SUFFIX}")]
    assert len(names) == 2, "what the edit made stale is removed"


def test_processes_that_compile_at_once_do_no_harm(tmp_path: Path) -> None:
    """Four processes on an empty cache all work, and leave whole files."""
    crowd = [
        subprocess.Popen(
            [sys.executable, "-c", SHIFT],
            env=surroundings(tmp_path),
            cwd="/",
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )
        for _ in range(4)
    ]
    for process in crowd:
        out, err = process.communicate(timeout=300)
        assert out.startswith("hits ")
        assert err == ""
    assert len(kernels_in(tmp_path)) == 2
    assert run(SHIFT, tmp_path).stdout == "hits 2\n"


def test_kernels_run_as_plain_python() -> None:
    """With NUMBA_DISABLE_JIT the whole basis runs, slowly, and decides the same."""
    script = (
        "import numpy as np, streambasis\n"
        "basis = streambasis.StreamBasis(5)\n"
        "x = np.random.default_rng(0).standard_normal((12, 5))\n"
        "print([basis.push(s).reason for s in x[:8]], list(basis.push_many(x).reason))\n"
    )
    done = run(script, "", NUMBA_DISABLE_JIT="1")
    assert done.stderr == ""
    x = np.random.default_rng(0).standard_normal((12, 5))
    basis = StreamBasis(5)
    expected = [basis.push(s).reason for s in x[:8]], list(basis.push_many(x).reason)
    assert done.stdout == f"{expected[0]} {expected[1]}\n"


def test_folders_are_tried_in_order(monkeypatch: pytest.MonkeyPatch) -> None:
    """Our own setting comes first, then numba's, the package, the user's cache folder."""
    monkeypatch.setenv(_cache.SETTING, "/one")
    monkeypatch.setenv("NUMBA_CACHE_DIR", "/two")
    monkeypatch.setenv("XDG_CACHE_HOME", "/four")
    package = Path(_cache.__file__).parent / "__pycache__"
    expected = [Path("/one"), Path("/two"), package, Path("/four/streambasis")]
    assert list(_cache.candidates()) == expected
    monkeypatch.delenv("XDG_CACHE_HOME")
    monkeypatch.setenv("HOME", "/home/someone")
    assert list(_cache.candidates())[-1] == Path("/home/someone/.cache/streambasis")


def test_a_compiler_without_our_place_for_the_cache(monkeypatch: pytest.MonkeyPatch) -> None:
    """Where numba keeps its cache elsewhere, kernels run without one, and a warning says so."""
    monkeypatch.setattr(_jit, "_without_cache", [])
    monkeypatch.setattr(_cache._warned, "_flag", False)
    dispatcher = SimpleNamespace()
    _jit.install_cache(dispatcher, norm.py_func)
    assert not hasattr(dispatcher, "_cache")
    with pytest.warns(CacheWarning, match="no place for them"):
        run_norm = _jit.entry(norm, np.ones(3))
    assert run_norm(np.full(4, 2.0)) == 4.0
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        _jit.entry(norm, np.ones(3))


def test_a_compiler_without_the_option_for_its_memory_manager(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """Where numba cannot leave its memory manager out, kernels compile with it and run the same."""
    assert _jit.without_memory_manager() == {"_nrt": False}, "the option that we count on is gone"
    monkeypatch.setattr(_jit, "cpu_target", SimpleNamespace(options=SimpleNamespace()))
    assert _jit.without_memory_manager() == {}
    rows = np.arange(6.0).reshape(2, 3)

    @_jit.kernel(reassociate=True)
    def last_sum(rows):
        row = rows[rows.shape[0] - 1]
        return row.sum()

    assert "_nrt" not in getattr(last_sum, "targetoptions", {})
    assert last_sum(rows) == 12.0


def test_a_kernel_of_its_own_can_be_flushed(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Flushing removes what is kept of one kernel and of no other."""
    monkeypatch.setenv(_cache.SETTING, str(tmp_path))
    cache = _cache.KernelCache(norm.py_func)
    mine = tmp_path / f"streambasis.kernels.scaling.norm-0-0{_cache.SUFFIX}"
    other = tmp_path / f"other.norm-0-0{_cache.SUFFIX}"
    mine.write_bytes(b"")
    other.write_bytes(b"")
    monkeypatch.setattr(_cache, "candidates", lambda: iter([tmp_path]))
    cache.flush()
    assert kernels_in(tmp_path) == [other]
    assert cache.cache_path == str(tmp_path)


def test_warming_up_leaves_nothing_to_compile() -> None:
    """After a warm-up, pushes of that dtype compile nothing; objects stay as they are."""
    basis = StreamBasis(4, dtype="float32")
    warm_up(basis)
    assert basis.count == 0
    from streambasis.kernels import block, growth

    known = [len(k.overloads) for k in (growth.push_growing, block.decide_block)]
    basis.push_many(np.eye(4))
    basis.push_many(np.eye(4))
    assert [len(k.overloads) for k in (growth.push_growing, block.decide_block)] == known
    with pytest.raises(SettingError, match="warm_up takes"):
        warm_up("StreamBasis")
    with pytest.raises(SettingError, match="float16"):
        warm_up(StreamBasis, dtypes=["float16"])
