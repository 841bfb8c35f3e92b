"""The forward what-if against closed forms, its table of the source, its balance."""

import json

import numpy as np
import pytest

from srcfit.case import make_case
from srcfit.case.model import Known
from srcfit.errors import MemberError, ReadingsError, UnitError
from srcfit.prediction import facts, predict, text
from srcfit.readings.model import Readings
from srcfit.trial import Trial, read_source

E_I, L, Q, P = 1.68e6, 4.0, 3e3, 10e3


def case_of(member, columns, source=None):
    return make_case({
        "title": "Invented", "member": member,
        "readings": {"file": "none.csv", "position": {"column": "x", "unit": "m"},
                     "column": columns},
        "source": source or {"unit": "kN/m"},
    })  # fmt: skip


def readings_of(case, places, values=0.0):
    """Each column read at each of its places."""
    rows = [(i, x) for i, at in enumerate(places) for x in at]
    specs = [case.columns[i] for i, _ in rows]
    n = len(rows)
    return Readings(
        file=("none.csv",) * n, line=np.arange(2, n + 2), group=tuple(s.group for s in specs),
        kind=tuple(s.kind for s in specs), unit=tuple(s.unit for s in specs),
        x=np.array([x for _, x in rows]), value=np.zeros(n) + values,
        sd=np.array([s.sd if s.sd else np.nan for s in specs]), used=np.ones(n, dtype=bool),
        reason=("",) * n, spec=np.array([i for i, _ in rows]), time=np.zeros(n),
    )  # fmt: skip


BEAM = {"kind": "beam", "length": "4 m", "bending_stiffness": "1.68 MN*m^2", "left": "pinned",
        "right": "pinned"}  # fmt: skip
DEFLECTION = {"column": "w", "kind": "deflection", "unit": "mm", "sd": "0.1 mm"}


def test_a_simple_beam_by_the_handbook():
    """Uniform load and a central force: 5 q L^4 / 384 EI + P L^3 / 48 EI; strain = d M / EI."""
    strain = {"column": "e", "kind": "strain", "unit": "1e-6", "sd": "1e-6", "distance": "100 mm"}
    case = case_of(BEAM, [DEFLECTION, strain])
    trial = Trial((Known(0, 4, Q), Known(2, 2, P)))
    found = predict(case, readings_of(case, [[2.0], [2.0, 1.0]]), trial)
    middle = 5 * Q * L**4 / 384 / E_I + P * L**3 / 48 / E_I
    moments = np.array([Q * L**2 / 8 + P * L / 4, 3 * Q * L**2 / 32 + P * L / 8])
    wanted = [1e3 * middle, *(1e6 * 0.1 * moments / E_I)]
    np.testing.assert_allclose(found.readings["predicted"], wanted, rtol=1e-9)
    np.testing.assert_allclose(found.readings["residual"], -np.array(wanted), rtol=1e-9)
    np.testing.assert_allclose(found.readings["standardised"][0], -middle / 1e-4, rtol=1e-9)
    forces = [r["value"] for r in found.reactions if r["kind"] == "force"]
    np.testing.assert_allclose(forces, [(Q * L + P) / 2e3] * 2, rtol=1e-9)
    assert found.balance["source"] == pytest.approx(22)
    assert abs(found.balance["difference"]) < 1e-9
    assert found.balance["along"] == 0


def test_a_fin_by_the_handbook():
    """A long fin under uniform heat, both ends insulated: everywhere ambient + s / loss."""
    case = case_of(
        {"kind": "conductor", "length": "2 m", "conductance": "0.4 W*m/K", "loss": "2.5 W/(m*K)",
         "ambient": "20 degC", "left": "insulated", "right": "insulated"},
        [{"column": "T", "kind": "temperature", "unit": "degF", "sd": "0.5 K"}],
        {"unit": "W/m", "known": [{"from": "0 m", "to": "2 m", "value": "50 W/m"}]},
    )  # fmt: skip
    found = predict(case, readings_of(case, [[0.0, 0.7, 2.0]], 293.15), Trial((Known(0, 2, 25),)))
    np.testing.assert_allclose(found.readings["predicted"], 32 + 1.8 * 50, rtol=1e-9)
    np.testing.assert_allclose(found.readings["residual"], -1.8 * 30, rtol=1e-9)
    np.testing.assert_allclose(found.readings["value"], 68, rtol=1e-12)
    assert found.misfit == pytest.approx(60)
    assert found.balance["along"] == pytest.approx(150)
    assert abs(found.balance["difference"]) < 1e-9
    assert "What the case states as known is added" in text(found)


def test_a_solid_sphere_by_the_handbook():
    """T = surface + s (R^2 - r^2) / 6 k; all heat leaves through the surface, s 4/3 pi R^3."""
    case = case_of(
        {"kind": "sphere", "inner_radius": "0 m", "outer_radius": "0.3 m",
         "conductivity": "2 W/(m*K)", "right": {"value": "15 degC"}},
        [{"column": "T", "kind": "temperature", "unit": "degC", "sd": "0.5 K"}],
        {"unit": "W/m^3"},
    )  # fmt: skip
    r = np.array([0.05, 0.15, 0.28])
    found = predict(case, readings_of(case, [r]), Trial((Known(0, 0.3, 700.0),)))
    wanted = 15 + 700 * (0.09 - r**2) / 12
    np.testing.assert_allclose(found.readings["predicted"], wanted, rtol=1e-9)
    total = 700 * 4 / 3 * np.pi * 0.3**3
    assert found.balance["source"] == pytest.approx(total, rel=1e-9)
    assert found.reactions[0]["value"] == pytest.approx(total, rel=1e-9)


def test_a_bedded_beam_is_in_balance_along_its_length():
    member = {"kind": "beam", "length": "30 m", "bending_stiffness": "768 MN*m^2",
              "foundation": "12 MN/m^2", "left": "free", "right": "clamped"}  # fmt: skip
    case = case_of(member, [DEFLECTION])
    trial = Trial((Known(3, 11.3, 6e4), Known(26, 26, 18e4)))
    found = predict(case, readings_of(case, [[5.0]]), trial)
    assert found.balance["source"] == pytest.approx(6e1 * 8.3 + 180, rel=1e-12)
    assert abs(found.balance["difference"]) < 1e-6
    assert found.balance["along"] > 300


def test_a_driven_beam_has_an_imaginary_part():
    """Free-free beam on bedding, uniform load: u = q / (k (1 + i eta) - omega^2 m), no bending."""
    member = BEAM | {"foundation": "1 MN/m^2", "left": "free", "right": "free", "mass": "100 kg/m",
                     "frequency": "5 Hz", "damping": 0.2}  # fmt: skip
    case = case_of(member, [DEFLECTION])
    bare = readings_of(case, [[1.0, 3.0]], 0j)
    found = predict(case, bare, Trial((Known(0, 4, Q),)))
    wanted = Q / (1e6 * (1 + 0.2j) - (10 * np.pi) ** 2 * 100) * 1e3
    table = found.readings
    np.testing.assert_allclose(
        table["predicted"] + 1j * table["predicted_imag"], wanted, rtol=1e-8
    )
    assert abs(found.balance["difference"]) < 1e-9
    assert "predicted_imag" in text(found)


def test_what_nothing_holds_needs_balance_and_moves_with_the_readings():
    member = BEAM | {"left": "free", "right": "free"}
    case = case_of(member, [DEFLECTION])
    x = np.array([0.5, 1.5, 2.5, 3.5])
    bare = readings_of(case, [x], 1e-3 * (2 + x))
    with pytest.raises(MemberError, match="out of balance"):
        predict(case, bare, Trial((Known(0, 4, Q),)))
    found = predict(case, bare, Trial(()))
    np.testing.assert_allclose(found.readings["residual"], 0, atol=1e-9)
    found = predict(case, bare, Trial((Known(0, 4, Q), Known(2, 2, -4 * Q))))
    residual = found.readings["residual"].to_numpy()
    assert np.abs(residual).max() > 0.1
    np.testing.assert_allclose(residual, residual[::-1], rtol=1e-6)  # symmetric, as the load is
    assert "free motion is fitted" in text(found)


def test_nuisances_stand_at_their_guess_and_are_named():
    support = {"at": "2 m", "kind": "pinned", "settlement": "unknown"}
    column = DEFLECTION | {"offset": "unknown", "scale": 2}
    case = case_of(BEAM | {"support": [support]}, [column])
    found = predict(case, readings_of(case, [[1.0]]), Trial((Known(0, 4, Q),)))
    span = Q * 2.0**4 / E_I * (5 / 384 - 1 / 128)  # half a two-span beam: propped cantilever
    assert found.readings["predicted"][0] == pytest.approx(2 * 1e3 * span, rel=1e-9)
    assert any("settlement:2 m = 0 mm" in n and "offset:w = 0 mm" in n for n in found.notes)
    assert "reaction support:2 m" in text(found)  # as `srcfit recover` names it


def test_estimated_noise_gives_no_misfit():
    case = case_of(BEAM, [DEFLECTION | {"sd": "estimate"}])
    found = predict(case, readings_of(case, [[1.0]]), Trial(()))
    assert found.misfit is None
    assert facts(found)["readings"][0]["standardised"] is None


# --- the table ---------------------------------------------------------------------------------


@pytest.fixture
def beam():
    return case_of(BEAM, [DEFLECTION])


@pytest.mark.parametrize(
    ("content", "parts"),
    [
        ("from [m],to [m],value [kN/m]\n0,1.5,2\n1,4,-1e1\n", [(0, 1.5, 2e3), (1, 4, -1e4)]),
        ("at [cm],strength [N],note\n150,7,a\n\n400,8,b\n", [(1.5, 1.5, 7), (4, 4, 8)]),
        ("\ufefffrom [m],to [m],value [N/m],at [m],strength [kN]\n0,1,2,,\n,,,3,4\n",
         [(0, 1, 2), (3, 3, 4e3)]),
        ("x [m],estimate [kN/m],sd [kN/m]\n0.5,1,9\n2,2,9\n3.5,3,9\n",
         [(0, 1, 1e3), (1, 3, 2e3), (3, 4, 3e3)]),
        ("x [m],estimate [kN/m],from [m],to [m]\n1,5,0,2\n3,6,2,4\n", [(0, 2, 5e3), (2, 4, 6e3)]),
    ],
)  # fmt: skip
def test_every_form_of_the_table(tmp_path, beam, content, parts):
    path = tmp_path / "s.csv"
    path.write_text(content, encoding="utf-8")
    trial = read_source(path, beam)
    np.testing.assert_allclose([(p.start, p.end, p.value) for p in trial.parts], parts, rtol=1e-12)
    assert all("note" in u or "sd" in u or "x [m]" in u for u in trial.unread)


@pytest.mark.parametrize(
    ("content", "error", "words"),
    [
        ("", ReadingsError, "it is empty"),
        (b"\xff\xfe\x00from", ReadingsError, "no comma-separated table in UTF-8"),
        ("a,b\n1,2\n", ReadingsError, "s.csv:1: it has none of the columns"),
        ("from [m],to [m],value [kN/m]\n", ReadingsError, "no rows with numbers"),
        ("from [m],to [m],value\n0,1,2\n", ReadingsError, '"value" has no unit'),
        ("from [m],to [m],value [kN]\n0,1,2\n", UnitError, "wrong dimension"),
        ("from [m],to [m],value [kN/m]\n0,1,two\n", ReadingsError, r's.csv:2.*"two" is no number'),
        ("from [m],to [m],value [kN/m]\n0,1,nan\n", ReadingsError, '"nan" is no number'),
        ("from [m],to [m],value [kN/m]\n0,,2\n", ReadingsError, "s.csv:2: the row lacks to"),
        ("from [m],to [m],value [kN/m]\n\n0,5,2\n", ReadingsError, "s.csv:3: .*beyond the member"),
        ("from [m],to [m],value [kN/m]\n3,2,2\n", ReadingsError, "`from` is not below `to`"),
        ("at [m],strength [kN]\n-1,2\n", ReadingsError, "beyond the member"),
        ("x [m],estimate [kN/m]\n0.5,1\n1.5,1\n", ReadingsError, "the cells end at 2 m"),
        ("x [m],estimate [kN/m]\n0.5,1\n0.7,1\n", ReadingsError, "s.csv:3: x = 0.7 m is no"),
    ],
)  # fmt: skip
def test_every_fault_of_the_table_is_named(tmp_path, beam, content, error, words):
    path = tmp_path / "s.csv"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    with pytest.raises(error, match=words):
        read_source(path, beam)


def test_a_missing_table_is_named(tmp_path, beam):
    with pytest.raises(ReadingsError, match=r"cannot be read .no such file"):
        read_source(tmp_path / "none.csv", beam)


def saved(folder, lumped, nuisances):
    folder.mkdir()
    (folder / "source.csv").write_text("x [m],estimate [kN/m]\n1,2\n3,4\n")
    summary = {"lumped": lumped, "nuisances": nuisances}
    (folder / "summary.json").write_text(json.dumps(summary))
    return folder


LUMPED = [{"name": "pole", "at": "1 m"}, {"name": "pallet", "at": "3 m", "width": "0.5 m"}]
TOLD = [{"name": "pole", "value": 5.0}, {"name": "pallet", "value": 6.0}]


def test_an_earlier_result_brings_its_lumped_parts_and_nuisances(tmp_path):
    case = case_of(BEAM, [DEFLECTION | {"offset": "unknown"}], {"unit": "kN/m", "lumped": LUMPED})
    nuisances = [{"name": "offset:w", "value": 0.25}]
    trial = read_source(saved(tmp_path / "r", TOLD, nuisances), case)
    parts = [(p.start, p.end, p.value) for p in trial.parts]
    wanted = [(0, 2, 2e3), (2, 4, 4e3), (1, 1, 5e3), (2.75, 3.25, 12e3)]
    np.testing.assert_allclose(parts, wanted, rtol=1e-12)
    bare = readings_of(case, [[1.0, 2.0]])
    shifted = predict(case, bare, trial).readings["predicted"]
    plain = predict(case, bare, Trial(trial.parts)).readings["predicted"]
    np.testing.assert_allclose(shifted - plain, 0.25, rtol=1e-9)
    assert not any("guess" in n for n in predict(case, bare, trial).notes)


@pytest.mark.parametrize(
    ("lumped", "nuisances", "words"),
    [
        (TOLD[:1], [], "differs in its parts: pallet"),
        ([TOLD[0], TOLD[1] | {"value": None}], [], "pallet is not determined"),
        (TOLD, [{"name": "offset:w", "value": None}], "offset:w is not determined"),
        (None, [], "no summary of a recovery"),
    ],
)
def test_an_earlier_result_that_does_not_fit(tmp_path, lumped, nuisances, words):
    case = case_of(BEAM, [DEFLECTION], {"unit": "kN/m", "lumped": LUMPED})
    with pytest.raises(ReadingsError, match=words):
        read_source(saved(tmp_path / "r", lumped, nuisances), case)
