"""The compliance suite lies one folder up, for every format's tests to use."""

import sys
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
pytest.register_assert_rewrite("compliance")
