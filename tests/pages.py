"""What the tests of pages share: a reader of their markup, and a browser without a screen where there is one."""

from __future__ import annotations

import base64
import hashlib
import re
import shutil
import subprocess
import tempfile
from html.parser import HTMLParser
from pathlib import Path

EMPTY = ("meta", "img", "br", "input")
BROWSER = shutil.which("chromium")
FLAGS = (
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
    "--disable-background-networking", "--disable-component-update", "--disable-sync",
    "--hide-scrollbars", "--enable-logging=stderr",
)  # fmt: skip


class Page(HTMLParser):
    """Tags, what they load, the text, the scripts of a page."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.source = text
        self.open: list[str] = []
        self.seen: list[str] = []
        self.loads: list[str] = []
        self.links: list[str] = []
        self.texts: list[str] = []
        self.scripts: list[str] = []
        self.attributes: list[tuple[str, str]] = []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attrs):
        self.seen.append(tag)
        wanted = ("src", "xlink:href", "action", "data", "srcset", *(("href",) if tag != "a" else ()))
        self.loads += [value for key, value in attrs if key in wanted]
        self.links += [value for key, value in attrs if tag == "a" and key == "href"]
        self.attributes += [(key, value or "") for key, value in attrs]
        if tag == "script":
            self.scripts.append("")
        if tag not in EMPTY:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.handle_starttag(tag, attrs)
        if tag not in EMPTY:
            self.open.pop()

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        if self.open[-1:] == ["script"]:
            self.scripts[-1] += data
        elif self.open[-1:] != ["style"]:
            self.texts.append(data)

    @property
    def text(self) -> str:
        return " ".join(" ".join(self.texts).split())

    def policy(self) -> str:
        (found,) = re.findall(r'http-equiv="Content-Security-Policy" content="([^"]*)"', self.source)
        return found

    def check(self) -> None:
        """A page is whole, loads nothing, and its policy allows exactly the scripts that are in it."""
        assert self.open == []
        assert self.loads == []
        assert "style" not in [key for key, _ in self.attributes]  # the policy would refuse them
        assert not [key for key, _ in self.attributes if key.startswith("on")]
        allowed = set(re.findall(r"'sha256-([^']*)'", self.policy().split("script-src")[1].split(";")[0]))
        assert {base64.b64encode(hashlib.sha256(s.encode()).digest()).decode() for s in self.scripts} == allowed
        assert self.policy().startswith("default-src 'none'")


def browse(
    page: Path,
    *,
    width: int = 1200,
    height: int = 1600,
    act: str = "",
    picture: Path | None = None,
    more: tuple[str, ...] = (),
) -> str:
    """Open a page in the browser and return its markup once its scripts have run.

    The page may neither complain nor be wider than the window.

    Parameters
    ----------
    act : str
        Script that plays the reader, run after the page's own; the policy is taken out for it.
    picture : Path, optional
        Where a picture of the window goes.
    more : tuple of str
        Options of the browser.
    """
    text = page.read_text(encoding="utf-8")
    measure = "document.body.dataset.wider = document.documentElement.scrollWidth - window.innerWidth;"
    if act:
        text = re.sub(r"<meta http-equiv=[^>]*>", "", text)
        text = text.replace("</body>", f"<script>{{ {act}\n{measure} }}</script></body>")
    with tempfile.TemporaryDirectory(prefix="browser-") as folder:
        shown = page
        if act:
            shown = Path(folder) / "acted.html"
            shown.write_text(text, encoding="utf-8")
        command = [BROWSER, *FLAGS, *more, f"--user-data-dir={folder}/profile", f"--window-size={width},{height}"]
        what = [f"--screenshot={picture}"] if picture else ["--dump-dom"]
        done = subprocess.run([*command, *what, shown.as_uri()], capture_output=True, text=True, timeout=120)
    complaints = [line for line in done.stderr.splitlines() if "CONSOLE" in line]
    assert complaints == [], complaints
    if act and not picture:
        (wider,) = re.findall(r'data-wider="(-?\d+)"', done.stdout)
        assert int(wider) <= 0
    return done.stdout
