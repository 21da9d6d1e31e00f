"""Makes docs/openapi.yaml from the code; a warning of the generator is an error.

python tools/make_openapi.py            write the file
python tools/make_openapi.py --check    say whether the file is what the code makes
"""

import difflib
import os
import subprocess
import sys
import tempfile
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
FILE = ROOT / "docs" / "openapi.yaml"
MOST_LINES_SHOWN = 40


def made_text() -> str:
    """The description as the code makes it; ends the program when there are warnings."""
    with tempfile.TemporaryDirectory(prefix="labplan-openapi-") as folder:
        made = Path(folder) / "openapi.yaml"
        environment = dict(os.environ, DJANGO_SETTINGS_MODULE="labplan.settings.test")
        environment.pop("DATABASE_URL", None)
        ended = subprocess.run(
            [sys.executable, "manage.py", "spectacular", "--validate", "--fail-on-warn",
             "--file", str(made)],
            cwd=ROOT, env=environment, check=False,
        )  # fmt: skip
        if ended.returncode != 0:
            sys.exit(ended.returncode)
        return made.read_text(encoding="utf-8")


def main(arguments: list[str]) -> int:
    made = made_text()
    if arguments != ["--check"]:
        FILE.write_text(made, encoding="utf-8")
        print(f"Written: {FILE.relative_to(ROOT)}")
        return 0
    kept = FILE.read_text(encoding="utf-8") if FILE.exists() else ""
    if kept == made:
        return 0
    changes = difflib.unified_diff(
        kept.splitlines(), made.splitlines(), "kept", "made now", lineterm="", n=1
    )
    print("docs/openapi.yaml is stale; run 'make openapi' and look at what it changes.")
    print("\n".join(list(changes)[:MOST_LINES_SHOWN]))
    return 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
