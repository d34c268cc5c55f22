"""Put the licence texts of the libraries that a wheel bundles into it.

Usage: ``python tools/bundled_licences.py WHEEL``. The texts come from the Debian packages that
the libraries were taken from.
"""

from __future__ import annotations

import shutil
import subprocess
import sys
import tempfile
from pathlib import Path

DOCUMENTS = Path("/usr/share/doc")
COMMON = Path("/usr/share/common-licenses")


def package_of(library: str) -> str:
    """Name the Debian package of a bundled library such as ``libgfortran-1a2b3c4d.so.5``."""
    pattern = f"*/{library.split('-', maxsplit=1)[0]}*.so*"
    found = subprocess.run(
        ["dpkg", "-S", pattern], capture_output=True, text=True, check=False
    ).stdout
    packages = sorted({line.split(":")[0] for line in found.splitlines()} - {""})
    runtime = [name for name in packages if not name.endswith("-dev")]
    if not runtime:
        sys.exit(f"no Debian package holds {pattern}: its licence is not known")
    return runtime[0]


def add_texts(wheel: Path) -> list[str]:
    """Rewrite a wheel with the texts; returns their names."""
    with tempfile.TemporaryDirectory() as folder:
        run = [sys.executable, "-m", "wheel"]
        subprocess.run([*run, "unpack", "--dest", folder, str(wheel)], check=True)
        (root,) = Path(folder).iterdir()
        (information,) = root.glob("*.dist-info")
        target = information / "licenses" / "bundled"
        target.mkdir(parents=True, exist_ok=True)
        for library in sorted(root.glob("*.libs/*")):
            text = DOCUMENTS / package_of(library.name) / "copyright"
            shutil.copy(text, target / f"{library.name.split('-', maxsplit=1)[0]}.txt")
            for common in COMMON.iterdir():
                if str(common) in text.read_text(errors="replace"):
                    shutil.copy(common, target / common.name)
        names = sorted(text.name for text in target.iterdir())
        subprocess.run([*run, "pack", "--dest-dir", str(wheel.parent), str(root)], check=True)
    return names


if __name__ == "__main__":
    print("licence texts of bundled libraries:", ", ".join(add_texts(Path(sys.argv[1]))))
