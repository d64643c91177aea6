"""The Jacobian of every data set's balances against central differences, so every domain has its turn."""

from pathlib import Path

import numpy as np
import pytest

import reconcile

FOLDERS = sorted(p.parent for p in (Path(__file__).parents[2] / "datasets").glob("*/case.yaml"))


def test_every_domain_of_this_project_has_its_turn():
    used = {name for folder in FOLDERS for name in reconcile.load_case(folder).parts.spec.domains}
    assert used == {"charge", "elements", "energy", "fluid", "mixture", "perfusion"}


@pytest.mark.parametrize("folder", FOLDERS, ids=lambda p: p.name)
def test_jacobian(folder):
    result = reconcile.load_case(folder).run()
    equations = result.model.equations
    if equations.is_linear:
        step, tolerance = 1.0, 1e-9
    else:
        step, tolerance = 1e-5, 1e-6
    x = np.nan_to_num(result.group(0).x[0])
    x[result.model.fault_columns] += 0.1  # faults away from zero, where products with them show
    jacobian = equations.jacobian(x).toarray()
    row = np.abs(jacobian).max(axis=1)
    reach = step * np.maximum(np.abs(x), 1e-2)
    for c in range(x.size):
        up, down = x.copy(), x.copy()
        up[c] += reach[c]
        down[c] -= reach[c]
        numeric = (equations.closure(up) - equations.closure(down)) / (2 * reach[c])
        assert np.all(np.abs(numeric - jacobian[:, c]) <= tolerance * row), result.model.names[c]
