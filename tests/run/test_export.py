"""The corrected data set: whole, described, the same bytes twice, and readable again."""

from __future__ import annotations

import json
import os

import numpy as np
import pandas as pd
import pytest

import reconcile
from reconcile.corrected import load_corrected
from reconcile.export import write

NAMES = {
    "adjusted.csv", "balances.csv", "covariance.npz", "datapackage.json", "evidence.csv", "figures.csv", "sigmas.csv",
    "summary.json", "suspects.csv", "variables.csv",
}  # fmt: skip


@pytest.fixture
def result(datasets):
    case = reconcile.load_case(datasets / "membrane_skid")
    rng = np.random.default_rng(11)
    values = np.array([50.0, 150, 200, 40, 160, 10]) + rng.normal(size=(5, 6)) * [0.5, 1.5, 2, 0.4, 1.6, 0.2]
    values[2, 3] = np.nan
    values[4, 1] += 12.0
    return case.run(pd.DataFrame(values, columns=list("FRDPTB")))


def test_all_files_and_the_same_bytes_twice(result, tmp_path):
    first = write(result, tmp_path / "one")
    assert {p.name for p in first} == NAMES
    assert set(os.listdir(tmp_path / "one")) == NAMES
    write(result, tmp_path / "two")
    for name in NAMES:
        assert (tmp_path / "one" / name).read_bytes() == (tmp_path / "two" / name).read_bytes()


def test_values_read_back_close_the_balances(result, tmp_path):
    write(result, tmp_path)
    back = load_corrected(tmp_path)
    assert list(back.adjusted.columns)[1:] == list(result.variables)
    x = back.adjusted.iloc[:, 1:].to_numpy()
    assert np.array_equal(x, result.adjusted, equal_nan=True)
    flow = dict(zip(result.variables, x.T, strict=True))
    tee = flow["feed.flow"] + flow["recycle.flow"] - flow["discharge.flow"]
    assert np.abs(tee).max() <= 1e-9 * flow["discharge.flow"].max()


def test_covariance_and_propagation_read_back(result, tmp_path):
    write(result, tmp_path)
    back = load_corrected(tmp_path)
    np.testing.assert_allclose(back.covariance(0).to_numpy(), result.covariance(0), rtol=1e-12)
    np.testing.assert_allclose(np.sqrt(np.diag(back.covariance(2))), result.sigmas[2], rtol=1e-12)
    value, sigma = back.propagate("permeate.flow / feed.flow", 1)
    figure = result.figure_values(1)[0]
    assert (value, sigma) == pytest.approx((figure.value, figure.sigma), rel=1e-9)


def test_the_evidence_names_the_bad_snapshot(result, tmp_path):
    write(result, tmp_path)
    back = load_corrected(tmp_path)
    assert list(back.evidence["word"]).count("agrees") == 4
    assert back.evidence["explanation"][4] == "R"
    assert back.suspects["fault"].iloc[0] == "R"
    assert back.evidence["checks"][2] == 2


def test_the_description_fits_the_files(result, tmp_path):
    import hashlib

    write(result, tmp_path)
    package = json.loads((tmp_path / "datapackage.json").read_text())
    assert package["$schema"].endswith("/2.0/datapackage.json")
    for resource in package["resources"]:
        data = (tmp_path / resource["path"]).read_bytes()
        assert resource["bytes"] == len(data)
        assert resource["hash"] == f"sha256:{hashlib.sha256(data).hexdigest()}"
        if "schema" in resource:
            header = data.decode().splitlines()[0].split(",")
            assert header == [f["name"] for f in resource["schema"]["fields"]]
    units = {f["name"]: f.get("unit") for f in package["resources"][0]["schema"]["fields"]}
    assert units["feed.flow"] == "kg/h"
    assert set(package["provenance"]) >= {"program", "domains", "case_sha256", "readings_sha256"}


def test_a_changed_file_is_refused(result, tmp_path):
    write(result, tmp_path)
    with (tmp_path / "adjusted.csv").open("a") as file:
        file.write("tampered\n")
    with pytest.raises(reconcile.InputError, match="changed"):
        load_corrected(tmp_path)


def test_one_changed_digit_changes_the_hash_and_only_its_row(datasets, tmp_path):
    case = reconcile.load_case(datasets / "membrane_skid")
    values = {
        "F": [50.3, 50.1],
        "R": [158.6, 150.2],
        "D": [201.2, 200.4],
        "P": [39.8, 40.2],
        "T": [161.0, 160.4],
        "B": [10.1, 9.9],
    }
    one = case.run(values)
    two = case.run({**values, "F": [50.3, 50.2]})
    assert one.provenance["readings_sha256"] != two.provenance["readings_sha256"]
    assert np.array_equal(one.adjusted[0], two.adjusted[0])
    assert not np.array_equal(one.adjusted[1], two.adjusted[1])


def test_summary_is_strict_json(result):
    text = json.dumps(reconcile.export.summary_of(result), allow_nan=False)
    assert json.loads(text)["snapshots"][4]["explanation"] == "R"


def test_what_is_done_about_a_suspect_is_the_users_choice_and_recorded(datasets, tmp_path):
    case = reconcile.load_case(datasets / "membrane_skid")
    flagged = case.run()
    excluded = case.run(suspects="exclude")
    compensated = case.run(suspects="compensate")
    by_hand = case.run(exclude={"R": "what if"})
    assert not np.array_equal(flagged.adjusted, excluded.adjusted)
    np.testing.assert_allclose(excluded.adjusted, by_hand.adjusted, rtol=1e-12)
    np.testing.assert_allclose(excluded.sigmas, by_hand.sigmas, rtol=1e-9)
    np.testing.assert_allclose(excluded.adjusted, compensated.adjusted, rtol=1e-12)
    assert excluded.objective[0] == flagged.objective[0]
    for result, word in ((flagged, "flagged"), (excluded, "excluded R"), (compensated, "compensated for R")):
        write(result, tmp_path / word)
        back = load_corrected(tmp_path / word)
        assert back.evidence["decision"][0].startswith(word)
        np.testing.assert_allclose(np.sqrt(np.diag(back.covariance(0))), result.sigmas[0], rtol=1e-12)
    assert excluded.figure_values()[0].value == pytest.approx(by_hand.figure_values()[0].value, rel=1e-12)


def test_a_suspect_that_cannot_be_told_is_left_as_it_is(datasets):
    case = reconcile.load_case(datasets / "crystalliser")
    assert np.array_equal(case.run().adjusted, case.run(suspects="exclude").adjusted, equal_nan=True)
