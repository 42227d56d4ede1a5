"""What Spark needs is looked for before it fails without saying why; nothing loads it early."""

from __future__ import annotations

import importlib.metadata
import os
import subprocess
import sys
from pathlib import Path

import pytest

from streambasis.errors import EngineError, StreambasisError
from streambasis.fleet import spark_setup

FINE = {"pyspark": "4.3.0", "pandas": "2.3.3", "protobuf": "6.33.5"}


def pretend(monkeypatch: pytest.MonkeyPatch, versions: dict[str, str]) -> None:
    """Have these versions installed and no others; the messages of protobuf load."""

    def version(package: str) -> str:
        if package not in versions:
            raise importlib.metadata.PackageNotFoundError(package)
        return versions[package]

    monkeypatch.setattr(importlib.metadata, "version", version)
    monkeypatch.setattr(importlib, "import_module", lambda name: name)


def test_a_fine_environment_is_let_pass(monkeypatch: pytest.MonkeyPatch) -> None:
    """With the versions that work nothing is said."""
    pretend(monkeypatch, FINE)
    spark_setup.check_environment()


@pytest.mark.parametrize(
    ("package", "version", "way_out"),
    [
        ("pyspark", None, "pip install 'streambasis[spark]'"),
        ("pyspark", "3.5.8", "4.0 or later"),
        ("pandas", None, "pip install 'streambasis[spark]'"),
        ("pandas", "3.0.1", "pip install 'pandas<3'"),
        ("pandas", "1.5.3", "pandas from 2.2"),
        ("protobuf", None, "pip install 'streambasis[spark]'"),
    ],
)
def test_what_is_missing_or_does_not_fit_is_named(
    package: str, version: str | None, way_out: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The message names the package and what to install."""
    versions = {name: has for name, has in FINE.items() if name != package}
    pretend(monkeypatch, versions if version is None else {**versions, package: version})
    with pytest.raises(EngineError) as caught:
        spark_setup.check_environment()
    assert package in str(caught.value)
    assert way_out in str(caught.value)
    assert isinstance(caught.value, StreambasisError)
    assert isinstance(caught.value, RuntimeError)


def test_a_protobuf_that_is_too_old_is_named(monkeypatch: pytest.MonkeyPatch) -> None:
    """Where the messages of this pyspark do not load, the message says so."""
    pretend(monkeypatch, FINE)

    def refuse(name: str) -> None:
        raise TypeError(f"{name}: made by a later version")

    monkeypatch.setattr(importlib, "import_module", refuse)
    with pytest.raises(EngineError, match="pip install -U protobuf"):
        spark_setup.check_environment()


@pytest.mark.parametrize(
    ("script", "message"),
    [
        (None, "no java in JAVA_HOME"),
        ("echo 'openjdk version \"11.0.22\"' >&2", "is Java 11"),
        ("echo 'openjdk version \"1.8.0_402\"' >&2", "is Java 8"),
        ("exit 1", "-version fails"),
        ("echo 'openjdk version \"21.0.2\"' >&2", None),
    ],
)
def test_java_is_looked_at(
    script: str | None, message: str | None, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    """A Java that is missing, too old or does not start is told with the way out."""
    pretend(monkeypatch, FINE)
    (tmp_path / "bin").mkdir()
    if script is not None:
        program = tmp_path / "bin" / "java"
        program.write_text(f"#!/bin/sh\n{script}\n")
        program.chmod(0o755)
    monkeypatch.setenv("JAVA_HOME", str(tmp_path))
    if message is None:
        spark_setup.check_environment(java=True)
        return
    with pytest.raises(EngineError, match="install Java 17 or later") as caught:
        spark_setup.check_environment(java=True)
    assert message in str(caught.value)


def test_fleets_load_without_spark() -> None:
    """Neither the threads' fleet nor the face for Spark loads pyspark or pandas."""
    code = (
        "import sys, streambasis.fleet, streambasis.fleet.spark; "
        "print([m for m in ('pyspark', 'pandas') if m in sys.modules])"
    )
    shown = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, env=os.environ
    )
    assert shown.stdout.strip() == "[]"
