"""Makes the three lock files from pyproject.toml, with uv; only make lock calls this.

    python3 tools/make_locks.py [--upgrade]

Versions that still fit are kept; --upgrade takes the newest. uv is taken from PATH, else it is
installed for this one use into a folder that is deleted afterwards.
"""

import shutil
import subprocess
import sys
import tempfile
import venv
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
EXTRAS = {
    "requirements.lock": [],
    "requirements-test.lock": ["--extra", "test"],
    "requirements-dev.lock": ["--extra", "dev"],
}
# One file for every Python and system, with hashes, without this machine's addresses.
OPTIONS = (
    *("--universal", "--python-version", "3.11", "--generate-hashes", "--quiet"),
    *("--no-header", "--no-annotate", "--no-emit-index-url", "--no-emit-find-links"),
)


def install_uv(folder: Path) -> str:
    """Install uv into a virtual environment in the folder; returns the program."""
    print("Installing uv for this one use ...", flush=True)
    venv.create(folder, with_pip=True)
    python = str(folder / "bin" / "python")
    subprocess.run([python, "-m", "pip", "install", "--quiet", "uv"], check=True)
    return str(folder / "bin" / "uv")


def make_locks(uv: str, more: list[str]) -> None:
    for name, extra in EXTRAS.items():
        command = [uv, "pip", "compile", *OPTIONS, *extra, *more, "pyproject.toml", "-o", name]
        subprocess.run(command, cwd=ROOT, check=True, stdout=subprocess.DEVNULL)
        print(f"{name} is made.", flush=True)


def main(more: list[str]) -> int:
    try:
        with tempfile.TemporaryDirectory(prefix="labplan-uv-") as folder:
            make_locks(shutil.which("uv") or install_uv(Path(folder)), more)
    except subprocess.CalledProcessError as error:
        print(f"The lock files could not be made: {' '.join(error.cmd)} failed.", file=sys.stderr)
        return 2
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
