"""`evaluate` on published and exactly computed titration tables; source and status stand in each table's # lines."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from controller.curves.evaluate_file import EvaluateOptions, evaluate_file

TABLES = Path(__file__).resolve().parents[1] / "data" / "tables"

AGCL = "agcl_2433umol_mV.csv"
HARVEY = "weakacid_harvey_t9_5.csv"
MES = "mes_0p02M_naoh.csv"
GRAN = "gran_anc_50mL.csv"
PHOSPHORIC = "computed_h3po4_naoh.csv"
CARBONATE = "computed_na2co3_hcl_closed.csv"
DICKSON = "seawater_alkalinity_dickson1981_theoretical.csv"
EIGHT = "hcl_naoh_textbook_8pts.csv"
SERIES = "acetic_naoh_timeseries_run1.csv"


def evaluated(name: str, **said: Any) -> dict[str, Any]:
    return evaluate_file(TABLES / name, EvaluateOptions(**said))


def vessel(volume_ml: float, concentration_mol_l: float, substance: str | None = None) -> dict[str, Any]:
    return {
        "initial_volume_ml": volume_ml,
        "titrant_concentration_mol_l": concentration_mol_l,
        "substance": substance,
    }


@pytest.mark.parametrize(
    ("name", "said", "volumes_ml", "tolerance_ml"),
    [
        # second-derivative zero as interpolated in the textbook (from memory, see the table)
        pytest.param(AGCL, {}, [24.34], 0.01, id="silver chloride in V"),
        # first-derivative maximum of the worked table, p. 291
        pytest.param(HARVEY, {}, [15.65], 0.03, id="worked derivative table"),
        pytest.param(MES, {}, [10.00], 0.02, id="MES, nothing said"),
        pytest.param(MES, vessel(50.0, 0.1), [10.00], 0.02, id="MES, volume and concentration"),
        pytest.param(MES, vessel(50.0, 0.1, "MES"), [10.00], 0.02, id="MES, substance"),
        # Gran's line through the last three points, as published with the data
        pytest.param(GRAN, {"initial_volume_ml": 50.0}, [0.2127], 0.0002, id="alkalinity, volume"),
        pytest.param(GRAN, vessel(50.0, 0.1), [0.2127], 0.0002, id="alkalinity, volume and concentration"),
        pytest.param(GRAN, {}, [0.2127], 0.0002, id="alkalinity, nothing said"),
        pytest.param(PHOSPHORIC, {}, [25.00, 50.00], 0.02, id="phosphoric, nothing said"),
        pytest.param(PHOSPHORIC, vessel(25.0, 0.1), [25.00, 50.00], 0.02, id="phosphoric, volume, concentration"),
        pytest.param(PHOSPHORIC, vessel(25.0, 0.1, "phosphoric acid"), [25.00, 50.00], 0.02, id="phosphoric"),
        pytest.param(CARBONATE, {}, [25.00, 50.00], 0.05, id="carbonate, nothing said"),
        pytest.param(CARBONATE, vessel(25.0, 0.1), [25.00, 50.00], 0.05, id="carbonate, volume, concentration"),
        pytest.param(CARBONATE, vessel(25.0, 0.1, "sodium carbonate"), [25.00, 50.00], 0.05, id="carbonate"),
        # Dickson 1981: total alkalinity 2450 umol/kg, 1.63333 g of acid; within 0.5 %
        pytest.param(DICKSON, {}, [1.63333], 0.0081, id="seawater, nothing said"),
        pytest.param(DICKSON, vessel(200.0, 0.3), [1.63333], 0.0081, id="seawater, mass and concentration"),
        pytest.param(EIGHT, {}, [20.0], 0.1, id="eight points, nothing said"),
        pytest.param(EIGHT, vessel(20.0, 0.1), [20.0], 0.01, id="eight points, volume and concentration"),
        pytest.param(SERIES, {}, [25.65], 1.15, id="time series"),
        pytest.param(SERIES, {"interpolate_volumes": True}, [25.65], 1.15, id="time series, interpolated"),
    ],
)
def test_end_points_are_the_published_ones(
    name: str, said: dict[str, Any], volumes_ml: list[float], tolerance_ml: float
) -> None:
    found = evaluated(name, **said)["end_points"]
    assert len(found) == len(volumes_ml)
    for end_point, volume_ml in zip(found, volumes_ml, strict=True):
        assert end_point["volume_ml"] == pytest.approx(volume_ml, abs=tolerance_ml)
        assert 0.0 < end_point["standard_uncertainty_ml"] <= 0.01 * end_point["volume_ml"]
        if name != SERIES:  # its published answer is a range
            assert abs(end_point["volume_ml"] - volume_ml) <= 3.0 * end_point["standard_uncertainty_ml"] + 0.005


@pytest.mark.parametrize("said", [{}, vessel(50.0, 0.1), vessel(50.0, 0.1, "MES")])
def test_the_pka_of_mes_is_the_published_one(said: dict[str, Any]) -> None:
    # Vega and Bates, Anal. Chem. 48 (1976) 1293: 6.270 at 25 °C (abstract), as used for the table
    half = evaluated(MES, **said)["half_equivalence"][0]
    assert half["pka"] == pytest.approx(6.27, abs=0.02)
    assert half["ph"] == pytest.approx(6.27, abs=0.02)
    assert half["volume_ml"] == pytest.approx(5.0, abs=0.02)


def test_pka_from_charge_balance_is_right_where_the_plain_half_equivalence_ph_is_not() -> None:
    # the table is exact for pK 2.148 and 7.198; at 0.05 mol/L the plain pH of the first is 0.14 too high
    first, second = evaluated(PHOSPHORIC, **vessel(25.0, 0.1, "phosphoric acid"))["half_equivalence"]
    assert first["pka"] == pytest.approx(2.148, abs=0.002)
    assert first["plain_bias"] == pytest.approx(0.143, abs=0.01)
    assert second["pka"] == pytest.approx(7.198, abs=0.002)


def test_no_pka_is_given_where_its_bias_cannot_be_bounded() -> None:
    first = evaluated(PHOSPHORIC)["half_equivalence"][0]
    assert first["pka"] is None
    assert "--initial-volume-ml" in first["remark"]


def test_the_third_proton_of_phosphoric_acid_is_no_end_point() -> None:
    found = evaluated(PHOSPHORIC)["end_points"]
    assert all(p["volume_ml"] < 60.0 for p in found)


def test_seawater_gran_line_states_its_bias() -> None:
    # a plain Gran line is biased by hydrogensulfate, 0.15 to 0.4 %
    result = evaluated(DICKSON, **vessel(200.0, 0.3))
    line = next(e for e in result["estimates"][0] if e["estimator"] == "Gran line beyond the end point")
    assert not line["sound"]
    assert line["volume_ml"] == pytest.approx(1.63333, rel=0.005)
    assert any("hydrogensulfate" in w and "biases" in w for w in result["warnings"])


def test_seawater_reads_mass_of_acid_and_says_so() -> None:
    assert any("acid_mass_g" in note for note in evaluated(DICKSON)["file"]["assumed"])


def test_alkalinity_says_that_the_ph_scale_does_not_fit_the_concentration() -> None:
    assert any("pH scale reads 0.36 off" in w for w in evaluated(GRAN, **vessel(50.0, 0.1))["warnings"])


@pytest.mark.parametrize("said", [{}, vessel(20.0, 0.1), vessel(20.0, 0.1, "hydrochloric acid")])
def test_the_two_misprinted_values_of_the_eight_point_exercise_are_named(said: dict[str, Any]) -> None:
    # printed 10.60 and 11.50, exact 10.397 and 11.387 (see the table); the other rows agree
    warnings = [w for w in evaluated(EIGHT, **said)["warnings"] if "wrong reading or entry" in w]
    assert [w.split(" mL")[0] for w in warnings] == ["the point at 20.1", "the point at 21"]
    assert "+0.2" in warnings[0]
    assert "+0.1" in warnings[1]


def test_the_time_series_traps_are_reported_by_line() -> None:
    result = evaluated(SERIES)
    text = "\n".join(result["warnings"])
    assert "821 of 901 lines have no volume" in text
    assert "line 272 (2), 409 (9.5)" in text
    assert result["duration_s"] == 900.0


def test_the_time_series_probe_that_reads_high_is_noticed_when_the_acid_is_named() -> None:
    # apparent pKa 5.3 instead of 4.76, see the table
    result = evaluated(SERIES, substance="acetic acid")
    assert any("+0.5" in w and "probe reads wrong" in w for w in result["warnings"])


def test_json_holds_the_documented_keys() -> None:
    result = evaluated(MES)
    keys = "outcome reason run seed end_points half_equivalence estimators result doses duration_s titrant_ml warnings"
    assert set(keys.split()) <= set(result)
    assert set(result["end_points"][0]) == {"volume_ml", "standard_uncertainty_ml", "ph", "potential_mv", "estimator"}
    assert {"volume_ml", "ph", "pka"} <= set(result["half_equivalence"][0])
    assert all(isinstance(v, list) for v in result["estimators"].values())
    assert "reported is" in result["estimator_rule"]
