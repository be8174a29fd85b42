"""Where the shared echo data is, for tests that use it when it is there."""

import os
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
ECHO_DATA = Path(os.environ.get("ECHO_DATA_DIR", ROOT.parent / "shared" / "echo_data"))
needs_echo_data = pytest.mark.skipif(
    not (ECHO_DATA / "index.csv").exists(), reason="shared echo data not found (ECHO_DATA_DIR)"
)
