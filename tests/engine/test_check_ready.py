"""What a check has compiled before it begins, and where."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import soundfile

from preview.cli import main
from preview.engine.check import ready


@pytest.fixture
def tone(tmp_path: Path) -> Path:
    path = tmp_path / "tone.wav"
    soundfile.write(path, 0.01 * np.sin(np.arange(4800) * 0.1), 48_000)
    return path


def check(tone: Path, *words: str) -> int:
    return main(["check", str(tone), "--workers", "1", "--no-margin", "--quality", "draft", *words])


@pytest.mark.parametrize("opamp", ["ideal", "TL072"])
def test_an_empty_cache_is_filled_first_and_said(
    tmp_path: Path,
    tone: Path,
    opamp: str,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    plans: list[object] = []
    monkeypatch.setattr(ready, "compile_first", plans.append)
    assert check(tone, "--opamp", opamp) == 0  # compiled by now, whatever ran before
    capsys.readouterr()
    plans.clear()
    assert check(tone, "--opamp", opamp) == 0
    assert not plans
    assert "compiling" not in capsys.readouterr().err
    (tmp_path / "cache").mkdir()
    monkeypatch.setenv("NUMBA_CACHE_DIR", str(tmp_path / "cache"))
    assert check(tone, "--opamp", opamp) == 0
    assert len(plans) == 1
    assert "compiling the computation for this machine, once" in capsys.readouterr().err


def test_what_cannot_be_kept_is_not_compiled_twice(
    tmp_path: Path, tone: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    plans: list[object] = []
    monkeypatch.setattr(ready, "compile_first", plans.append)
    monkeypatch.setenv("NUMBA_CACHE_DIR", str(tmp_path / "not there"))
    assert check(tone, "--opamp", "ideal") == 0
    assert not plans


def test_compiling_is_done_by_a_process_that_ends(monkeypatch: pytest.MonkeyPatch) -> None:
    done: list[int] = []

    class Context:
        class Process:
            def __init__(self, **given: object) -> None:
                assert given["target"] is ready._compile
                assert given["daemon"]

            def start(self) -> None:
                done.append(1)

            def join(self) -> None:
                done.append(2)

            def kill(self) -> None:
                done.append(3)

    monkeypatch.setattr("multiprocessing.get_context", lambda kind: Context if kind == "spawn" else None)
    ready.compile_first(None)  # type: ignore[arg-type]
    assert done == [1, 2, 3]
