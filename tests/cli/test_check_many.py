"""``preview check`` on very many files; slow."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import soundfile

pytestmark = [pytest.mark.slow, pytest.mark.timeout(1200)]

_LIMITED = """
import resource, sys
resource.setrlimit(resource.RLIMIT_NOFILE, (80, 80))
from preview.cli import main
sys.exit(main(sys.argv[1:]))
"""


@pytest.mark.skipif(sys.platform == "win32", reason="limits descriptors as POSIX has it")
@pytest.mark.parametrize("workers", ["1", "2"])
def test_a_thousand_short_files_one_of_them_damaged_take_eighty_descriptors(
    tmp_path: Path, workers: str
) -> None:
    rng = np.random.default_rng(1)
    for i in range(1000):
        samples = 0.3 * rng.uniform(-1, 1, 400) * np.hanning(400)
        folder = tmp_path / f"{i % 10}"
        folder.mkdir(exist_ok=True)
        soundfile.write(folder / f"{i:04d}.{('wav', 'flac')[i % 2]}", samples, 48_000)
    bad = tmp_path / "5" / "0555.flac"
    data = bytearray(bad.read_bytes())
    data[200:500] = bytes(300)
    bad.write_bytes(data)
    record = tmp_path / "results.jsonl"
    done = subprocess.run(
        [
            sys.executable,
            "-c",
            _LIMITED,
            *("check", str(tmp_path), "--quality", "draft", "--workers", workers),
            *("--resume", str(record), "--json"),
        ],
        capture_output=True,
        text=True,
        check=False,
    )
    report = json.loads(done.stdout)
    assert done.returncode == 3, done.stderr[-2000:]
    assert len(report["files"]) == 999
    (failed,) = report["failed"]
    assert failed["file"].endswith("0555.flac")
    assert "Traceback" not in done.stderr
    assert record.read_bytes().count(b"\n") == 999
