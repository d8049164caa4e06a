"""Makes the sample scripts importable; they stand outside the package."""

import sys
from pathlib import Path

SAMPLES = Path(__file__).resolve().parents[2] / "samples"
sys.path.insert(0, str(SAMPLES))
