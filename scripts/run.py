"""Set up once, then `cohort run STUDY ...`: python3 scripts/run.py studies/steady-infusion.toml"""

from __future__ import annotations

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent))

from setup_env import call, ready

if __name__ == "__main__":
    sys.exit(call([str(ready("run")), "-m", "cohort", "run", *sys.argv[1:]]))
