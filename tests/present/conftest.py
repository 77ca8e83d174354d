from __future__ import annotations

import pytest
from synthetic_result import record as make_record

from archopt.present.record import FrontRecord


@pytest.fixture
def record() -> FrontRecord:
    return make_record()
