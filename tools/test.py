"""Run the tests: ``python3 tools/test.py``; further words go to pytest: ``python3 tools/test.py -m long``.

Makes the environment ``.venv`` and installs benchfit with its ``dev`` extra into it if need be.
"""

from __future__ import annotations

import os
import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from tools.environment import REPO, ensure, start

if __name__ == "__main__":
    ensure("dev")
    os.chdir(REPO)
    workers = str(min(os.cpu_count() or 1, 4))
    print(f"benchfit: running pytest in {workers} processes", file=sys.stderr, flush=True)
    sys.exit(start(["-m", "pytest", "-n", workers, *sys.argv[1:]]))
