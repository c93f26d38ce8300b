"""What all tests share: the long switch and where the project's own data stand."""

import os
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
PRESETS = ROOT / "presets"
PHRASES = ROOT / "shared" / "phrases"
REFERENCE = ROOT / "shared" / "reference"

LONG = os.environ.get("GLIDESMITH_LONG", "") not in ("", "0")
"""True under the command for long runs, which sets GLIDESMITH_LONG=1; sizes are reduced otherwise."""

sys.path.insert(0, str(Path(__file__).resolve().parent))
