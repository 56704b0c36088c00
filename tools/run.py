"""Run benchfit from this folder: ``python3 tools/run.py CAPTURE --build SHEET``.

Makes the environment ``.venv`` and installs into it if need be; then every word goes to ``benchfit``.
"""

from __future__ import annotations

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from tools.environment import ensure, start

if __name__ == "__main__":
    ensure()
    sys.exit(start(["-m", "benchfit", *sys.argv[1:]]))
