"""Two hundred damaged files, the same in every run; scripts/fuzz.py makes thousands."""

import importlib.util
import sys
from pathlib import Path

import pytest

SCRIPT = Path(__file__).resolve().parents[2] / "scripts" / "fuzz.py"


@pytest.mark.skipif(not hasattr(__import__("os"), "fork"), reason="needs fork")
def test_200_damaged_files_are_read_or_refused():
    spec = importlib.util.spec_from_file_location("fuzz", SCRIPT)
    fuzz = importlib.util.module_from_spec(spec)
    sys.modules["fuzz"] = fuzz
    spec.loader.exec_module(fuzz)
    outcomes = fuzz.fuzz(200)
    assert [f"seed {o.seed}, {o.mutation}: {o.fault}" for o in outcomes if o.fault] == []
    assert {(o.way, o.code) for o in outcomes} == {
        (way, code) for way in ("inspect", "read") for code in (0, 3)
    }
    assert {o.mutation for o in outcomes} == {m.__name__ for m in fuzz.MUTATIONS}
