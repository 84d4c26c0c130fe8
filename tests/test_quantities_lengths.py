"""Stage readings, displacements and path differences cannot be mixed up."""

from __future__ import annotations

import operator
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from bench.errors import QuantityError
from bench.quantities import Opd, PathFactor, StageDisplacement, StagePosition

POSITION, DISPLACEMENT, OPD = StagePosition(2e-3), StageDisplacement(1e-3), Opd(5e-7)


def test_what_may_be_added() -> None:
    assert StagePosition(3e-3) - POSITION == StageDisplacement(pytest.approx(1e-3))
    assert StagePosition(pytest.approx(3e-3)) == POSITION + DISPLACEMENT
    assert StagePosition(pytest.approx(1e-3)) == POSITION + -DISPLACEMENT
    assert StageDisplacement(2e-3) == DISPLACEMENT + DISPLACEMENT
    assert StageDisplacement(0.0) == DISPLACEMENT - DISPLACEMENT
    assert Opd(1e-6) == OPD + OPD
    assert Opd(0.0) == OPD - OPD
    assert abs(-OPD) == OPD
    assert StagePosition(3e-3) > POSITION


@pytest.mark.parametrize(
    ("left", "right", "how"),
    [
        (POSITION, POSITION, operator.add),
        (POSITION, OPD, operator.add),
        (POSITION, OPD, operator.sub),
        (DISPLACEMENT, OPD, operator.add),
        (OPD, DISPLACEMENT, operator.add),
        (OPD, DISPLACEMENT, operator.sub),
        (DISPLACEMENT, OPD, operator.sub),
        (DISPLACEMENT, POSITION, operator.sub),
        (OPD, 1e-6, operator.add),
        (POSITION, 1e-6, operator.add),
        (1e-6, OPD, operator.add),
        (POSITION, OPD, operator.lt),
        (OPD, DISPLACEMENT, operator.lt),
    ],
)
def test_what_may_not_be_mixed(left: Any, right: Any, how: Callable[[Any, Any], Any]) -> None:
    with pytest.raises(TypeError):
        how(left, right)
    assert left != right or left is right


def test_path_factor_is_the_only_way_across() -> None:
    factor = PathFactor(-2.0)
    assert factor.opd(DISPLACEMENT) == Opd(-2e-3)
    assert factor.displacement(Opd(-2e-3)) == DISPLACEMENT
    with pytest.raises(TypeError):
        factor.opd(OPD)  # type: ignore[arg-type]
    with pytest.raises(TypeError):
        factor.displacement(DISPLACEMENT)  # type: ignore[arg-type]


@pytest.mark.parametrize("value", [0.0, float("nan"), float("inf")])
def test_a_path_factor_that_cannot_be(value: float) -> None:
    with pytest.raises(QuantityError, match="path factor"):
        PathFactor(value)


def test_the_type_checker_rejects_a_mixture(tmp_path: Path) -> None:
    api = pytest.importorskip("mypy.api")
    code = tmp_path / "mixed.py"
    code.write_text(
        "from bench.quantities.lengths import Opd, StageDisplacement, StagePosition\n"
        "right = StagePosition(1.0) - StagePosition(0.5)\n"
        "wrong_sum = Opd(1.0) + StageDisplacement(1.0)\n"
        "wrong_difference = StagePosition(1.0) - Opd(1.0)\n"
        "wrong_places = StagePosition(1.0) + StagePosition(1.0)\n"
    )
    root = Path(__file__).parents[1]
    out, _, _ = api.run(
        ["--config-file", "", "--cache-dir", str(tmp_path / "cache"), "--follow-imports=skip",
         "--namespace-packages", "--explicit-package-bases", str(root / "bench/errors.py"),
         str(root / "bench/quantities/lengths.py"), str(code)]
    )  # fmt: skip
    lines = {
        line.split(":")[1] for line in out.splitlines() if "mixed.py" in line and "error" in line
    }
    assert lines == {"3", "4", "5"}, out
