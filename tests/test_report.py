"""The page of a check: self-contained, complete, and safe against what files are called."""

from __future__ import annotations

import base64
import json
import re
import shlex
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest
import soundfile

from preview.cli import main

RATE_HZ = 48_000
QUICK = ("--quality", "draft", "--workers", "1", "--full-scale", "4 V")
VOID = {"meta", "br", "path", "use", "rect", "image"}


class Page(HTMLParser):
    """Looks whether tags match, and collects what would be fetched."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.open: list[str] = []
        self.links: list[str] = []
        self.text = ""
        self.pictures = 0
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.pictures += tag == "svg"
        for name, value in attrs:
            if name in ("src", "href", "xlink:href") and not (value or "").startswith(("#", "data:")):
                self.links.append(f"{tag} {name}={value}")
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        if tag not in VOID:
            assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        self.text += data


@pytest.fixture
def recordings(tmp_path: Path) -> Path:
    folder = tmp_path / "takes"
    folder.mkdir()
    t = np.arange(RATE_HZ) / RATE_HZ
    swell = np.sin(2 * np.pi * 300 * t) * np.hanning(RATE_HZ)
    soundfile.write(folder / "loud.wav", swell, RATE_HZ)
    soundfile.write(folder / "<b>&`quiet`|.wav", 0.1 * swell, RATE_HZ)
    (folder / "bad.wav").write_text("no sound")
    return folder


def page(capsys, folder: Path, name: str, *words: str) -> tuple[int, str]:
    code = main(["check", str(folder), *QUICK, "--report", str(folder / name), *words])
    capsys.readouterr()
    return code, (folder / name).read_text("utf-8")


def test_the_html_page_needs_nothing_else_and_holds_everything(capsys, recordings):
    code, text = page(capsys, recordings, "page.html", "--opamp", "TL072", "--limit", "headroom 6 dB")
    assert code == 3  # of the file that is no sound
    found = Page(text)
    assert found.open == []
    assert found.links == []
    assert "@import" not in text
    assert "url(" not in re.sub(r"url\(#", "", text)
    assert found.pictures >= 6  # levels, headroom and a moment of each recording
    for words in (
        "Inverting low-pass",
        "holds sum at ground",  # a role
        "TL072",
        "▒▒▒▒",  # the drawing
        "15.0 V and -15.0 V",
        "4.00 V peak",
        "missed: headroom 6 dB",
        "not checked",
        "at the high rail for",
        "<b>&`quiet`|.wav",
        "Python 3",
        "numba",
        "draft",
    ):
        assert words in found.text, words
    assert "<b>&`quiet`|.wav" not in text  # only escaped
    assert f"<td>{recordings / 'loud.wav'}</td>" in text  # whole: a page has room for it


def test_the_markdown_page_holds_its_pictures(capsys, recordings):
    _, text = page(capsys, recordings, "page.md", "--limit", "no clips")
    pictures = re.findall(r"!\[[^\]]*\]\(data:image/png;base64,([^)]+)\)", text)
    assert len(pictures) >= 6
    for picture in pictures:
        assert base64.b64decode(picture, validate=True).startswith(b"\x89PNG\r\n\x1a\n")
    assert r"\<b\>&\`quiet\`\|.wav" in text
    rows = [line for line in text.splitlines() if line.startswith("|")]
    assert len(rows) > 15
    table: list[int] = []
    for line in text.splitlines():
        if line.startswith("|"):
            table.append(len(re.findall(r"(?<!\\)\|", line)))
        else:
            assert len(set(table)) <= 1
            table = []


def test_its_command_line_repeats_the_check(capsys, recordings, monkeypatch):
    page(capsys, recordings, "page.html", "--part", "R1=22k", "--supply", "+9 -9")
    text = Page((recordings / "page.html").read_text("utf-8")).text
    folder, command = re.search(r"cd (.*)\n(preview check .*)\n", text).groups()  # type: ignore[union-attr] # it is there
    monkeypatch.chdir(folder)
    words = shlex.split(command)
    assert main([*words[1:], "--json"]) == 3
    again = json.loads(capsys.readouterr().out)
    assert again["understood"]["parts"]["R1"] == 22_000.0
    assert again["understood"]["supply_positive_v"] == 9.0
    loud = next(f for f in again["files"] if f["file"].endswith("loud.wav"))
    assert f"{loud['opamps'][0]['clip_events']}" in text


def test_a_log_of_numbers_has_its_pictures_too(capsys, tmp_path):
    t = np.arange(2000) / 50
    volts = 1.0 + 1.5 * np.sin(2 * np.pi * 0.5 * t) * np.hanning(2000)
    (tmp_path / "pump.csv").write_text(
        "time,v\n" + "".join(f"{a:.2f},{v:.6f}\n" for a, v in zip(t, volts, strict=True))
    )
    code, text = page(capsys, tmp_path, "page.html", "--opamp", "TL072")
    assert code == 0
    assert Page(text).pictures >= 3
    assert "at the low rail for" in Page(text).text


@pytest.mark.parametrize(
    ("name", "wanted", "told"),
    [
        ("page.pdf", 2, "ends in .html or .md"),
        ("no/such/page.html", 3, "no such folder"),
        (".html", 2, "ends in"),
    ],
)
def test_a_page_that_cannot_be_written_is_refused_before_anything_runs(
    capsys, recordings, name, wanted, told
):
    code = main(["check", str(recordings), *QUICK, "--report", str(recordings / name)])
    out, err = capsys.readouterr()
    assert (code, out) == (wanted, "")
    assert told in err
