"""Check the built pages: nothing is loaded from a network, and every local link has its target.

python docs/check.py FOLDER
"""

import re
import sys
from html.parser import HTMLParser
from pathlib import Path
from urllib.parse import unquote, urlsplit

REMOTE = re.compile(r"^(https?:)?//", re.IGNORECASE)
REMOTE_STYLE = re.compile(r"(?:@import\s+|url\()\s*['\"]?((?:https?:)?//[^'\")\s]+)")
LOADING = {"script", "link", "img", "iframe", "source", "video", "audio", "embed", "object"}


class Page(HTMLParser):
    """What one page loads, links to and can be linked to."""

    def __init__(self, path: Path) -> None:
        super().__init__()
        self.loads: list[str] = []
        self.links: list[str] = []
        self.anchors: set[str] = set()
        self.feed(path.read_text(encoding="utf-8"))

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        named = {name: value for name, value in attrs if value is not None}
        self.anchors |= {named[key] for key in ("id", "name") if key in named}
        target = named.get("src") or named.get("href") or named.get("data")
        if target is None or target.startswith("data:"):
            return
        if tag in LOADING:
            self.loads.append(target)
        if tag == "a" or (tag in LOADING and not REMOTE.match(target)):
            self.links.append(target)


def problems(root: Path) -> list[str]:
    """Say in words what is wrong with the pages below a folder."""
    pages = {path.resolve(): Page(path) for path in sorted(root.rglob("*.html"))}
    found = [] if pages else [f"{root}: no pages"]
    for path, page in pages.items():
        found += [f"{path.name}: loads {target}" for target in page.loads if REMOTE.match(target)]
        for link in page.links:
            parts = urlsplit(link)
            if parts.scheme or parts.netloc:
                continue
            target = (path.parent / unquote(parts.path)).resolve() if parts.path else path
            if not target.exists():
                found.append(f"{path.name}: no file for {link}")
            anchors = pages[target].anchors if target in pages else {parts.fragment}
            if parts.fragment and unquote(parts.fragment) not in anchors:
                found.append(f"{path.name}: no anchor for {link}")
    for style in sorted(root.rglob("*.css")):
        remote = REMOTE_STYLE.findall(style.read_text(encoding="utf-8"))
        found += [f"{style.name}: loads {target}" for target in remote]
    return found


if __name__ == "__main__":
    wrong = problems(Path(sys.argv[1]))
    print("\n".join(wrong) or "No page needs a network; every local link has its target.")
    sys.exit(bool(wrong))
