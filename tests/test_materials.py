"""Parents and processes: the tables, the checks of a value, and what a wrong unit is told."""

import dataclasses
import math
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from homog import materials as m
from homog.errors import InputError
from homog.tensors import isotropic

PARENTS = {
    "PA12 laser-sintered",
    "PA12 fused by agent and lamp",
    "TPU 85A",
    "TPU 95A",
    "PLA",
    "ABS",
    "polypropylene",
    "PET film",
    "kraft paper",
    "silicone",
    "316L laser-melted",
    "Ti-6Al-4V laser-melted",
    "AlSi10Mg laser-melted",
    "6061-T6",
}
PROCESSES = {
    "powder-bed polymer",
    "agent-and-lamp polymer",
    "filament",
    "resin",
    "laser powder bed metal",
    "laser-cut sheet",
    "folded film",
}
QUANTITIES = ["modulus_MPa", "poisson", "density_kg_m3", "yield_MPa"]

parents = st.builds(
    m.Material,
    st.just("random"),
    st.floats(0.01, 2e6),
    st.floats(-0.99, 0.4999),
    st.floats(20.0, 3e4),
)


def test_the_tables_hold_the_promised_names():
    assert set(m.materials()) == PARENTS
    assert set(m.processes()) == PROCESSES


@pytest.mark.parametrize("name", sorted(PARENTS))
def test_every_value_of_a_parent_has_an_origin_and_lies_in_its_range(name):
    rows = m.material_values(name)
    assert [row["quantity"] for row in rows] == QUANTITIES, "each quantity once"
    assert len({row["class"] for row in rows}) == 1
    for row in rows:
        assert row["status"] in {"read", "from memory"}
        assert row["source"] == "from memory" if row["status"] == "from memory" else "secondary source" in row["source"]
        if math.isnan(row["value"]):
            assert row["quantity"] == "yield_MPa" and row["note"], "only a yield may be absent, and it says why"
        elif math.isnan(row["low"]):
            assert math.isnan(row["high"])
        else:
            assert row["low"] < row["high"] and row["low"] <= row["value"] <= row["high"]
        if not math.isnan(row["value"]):
            assert getattr(m.material(name), row["quantity"]) == row["value"]


def test_rows_of_all_parents_are_those_of_each():
    # Compared as text because a missing value is NaN, which equals nothing.
    assert str(m.material_rows()) == str([row for name in m.materials() for row in m.material_values(name)])


def test_values_from_different_classes_are_of_their_usual_size():
    """A slip of a unit in the table moves a value by a thousand; these bands are a hundred wide or less."""
    bands = {"polymer": (500, 1e4), "elastomer": (0.1, 100), "paper": (1e3, 1e4), "metal": (3e4, 3e5)}
    densities = {"polymer": (800, 1500), "elastomer": (1000, 1300), "paper": (500, 1000), "metal": (2600, 8100)}
    for row in m.material_rows():
        parent = m.material(row["name"])
        assert bands[row["class"]][0] < parent.modulus_MPa < bands[row["class"]][1], parent
        assert densities[row["class"]][0] < parent.density_kg_m3 < densities[row["class"]][1], parent


def test_every_process_is_usable_and_says_where_it_is_from():
    for process in m.processes().values():
        assert 0 < process.wall_tolerance_mm < process.min_wall_mm <= process.recommended_wall_mm < process.max_cell_mm
        assert process.status in {"read", "from memory"} and process.source and process.note


def test_names_are_found_whatever_their_case():
    assert m.material("  pa12 LASER-sintered ") is m.material("PA12 laser-sintered")
    assert m.process("Filament").name == "filament"


@pytest.mark.parametrize(
    ("find", "name", "near"),
    [
        (m.material, "PA12 laser sintered", "PA12 laser-sintered"),
        (m.material, "6061", "6061-T6"),
        (m.material, "316", "316L laser-melted"),
        (m.process, "filaments", "filament"),
        (m.process, "metal", "laser powder bed metal"),
    ],
)
def test_an_unknown_name_is_told_the_nearest(find, name, near):
    with pytest.raises(InputError, match="nearest known") as caught:
        find(name)
    assert near in str(caught.value) and f"'{name}'" in str(caught.value) and "\n" not in str(caught.value)


def test_what_is_returned_is_the_callers_own():
    m.materials().clear()
    m.processes().clear()
    m.material_rows()[0]["value"] = -1.0
    assert set(m.materials()) == PARENTS and set(m.processes()) == PROCESSES
    assert m.material_rows()[0]["value"] > 0


@pytest.mark.parametrize(
    ("field", "value", "hint"),
    [
        ("modulus_MPa", 0.0017, "GPa"),
        ("modulus_MPa", 1.7e9, "in Pa"),
        ("modulus_MPa", 0.0, "GPa"),
        ("modulus_MPa", -1.0, "0.01 to 2e"),
        ("modulus_MPa", math.inf, "finite"),
        ("modulus_MPa", math.nan, "finite"),
        ("modulus_MPa", "1700", "not a number"),
        ("modulus_MPa", True, "not a number"),
        ("modulus_MPa", None, "not a number"),
        ("poisson", 0.5, "rubber"),
        ("poisson", -1.0, "unstable"),
        ("poisson", math.nan, "finite"),
        ("density_kg_m3", 0.93, "1 g/cm3 = 1000 kg/m3"),
        ("density_kg_m3", 930e3, "g/m3"),
        ("yield_MPa", 0.0, "GPa"),
        ("yield_MPa", 40e6, "in Pa"),
        ("name", " ", "not a name"),
        ("name", 3, "not a name"),
    ],
)
def test_a_wrong_value_is_named_with_its_range_or_likely_unit(field, value, hint):
    good = {"name": "mine", "modulus_MPa": 1700.0, "poisson": 0.4, "density_kg_m3": 930.0}
    with pytest.raises(InputError) as caught:
        m.Material(**(good | {field: value}))
    message = str(caught.value)
    assert field in message and hint in message and "\n" not in message


@pytest.mark.parametrize(
    ("field", "value", "hint"),
    [
        ("min_wall_mm", -0.1, "no limit"),
        ("min_wall_mm", 500.0, "micrometres"),
        ("wall_tolerance_mm", -0.2, "without sign"),
        ("wall_tolerance_mm", math.inf, "finite"),
        ("max_cell_mm", 0.0, "in m"),
        ("max_cell_mm", math.nan, "finite"),
    ],
)
def test_a_wrong_limit_of_a_process_is_named(field, value, hint):
    with pytest.raises(InputError) as caught:
        m.process("filament").replaced(**{field: value})
    assert field in str(caught.value) and hint in str(caught.value) and "'filament'" in str(caught.value)


def test_replacing_keeps_the_rest_and_the_original():
    pla = m.material("PLA")
    mine = pla.replaced(modulus_MPa=3100)
    assert mine == m.Material("PLA", 3100.0, pla.poisson, pla.density_kg_m3, pla.yield_MPa)
    assert isinstance(mine.modulus_MPa, float) and pla.modulus_MPa != mine.modulus_MPa
    with pytest.raises(dataclasses.FrozenInstanceError):
        pla.modulus_MPa = 1.0
    with pytest.raises(InputError, match="nearest known: modulus_MPa"):
        pla.replaced(modulus=1.0)
    with pytest.raises(InputError, match="nearest known: min_wall_mm"):
        m.process("resin").replaced(min_wall=1.0)


def test_a_process_of_ones_own_has_no_limits_but_those_given():
    mine = m.Process("mine", min_wall_mm=0.4)
    assert (mine.recommended_wall_mm, mine.wall_tolerance_mm, mine.max_cell_mm) == (0.0, 0.0, math.inf)
    assert mine.status == "given"


@given(parents)
def test_plane_strain_is_the_solid_held_along_axis_3(parent):
    """The plane-stress stiffness of the plane-strain constants is the in-plane part of the solid's stiffness."""
    deep = parent.replaced(deep=True)
    plane = isotropic(deep.wall_modulus_MPa, deep.wall_poisson, d=2)
    solid = isotropic(parent.modulus_MPa, parent.poisson, d=3)
    held = solid[[0, 1, 5]][:, [0, 1, 5]]
    # Both lose digits as 1 - 2 nu goes to 0: it is 2e-4 at the end of the range, and an eps over that is 1e-12.
    assert abs(plane - held).max() <= 1e-10 * abs(held).max()


@given(parents)
def test_shear_modulus_is_that_of_the_tensor(parent):
    """Half the last diagonal entry of the Mandel stiffness is G."""
    solid = isotropic(parent.modulus_MPa, parent.poisson, d=3)
    # Relative rounding of 1 + nu is eps/0.01 at nu = -0.99; the two-term sum in the tensor adds a few eps.
    assert solid[5, 5] / 2 == pytest.approx(parent.shear_modulus_MPa, rel=1e-12)


def test_importing_the_tables_is_light():
    """Start-up time: the module must not pull in numpy, pandas or a printing library."""
    code = "import sys; before = set(sys.modules); import homog.materials; print(*set(sys.modules) - before)"
    root = Path(__file__).resolve().parent.parent
    loaded = subprocess.run([sys.executable, "-c", code], cwd=root, capture_output=True, text=True, check=True).stdout
    assert "homog.materials" in loaded.split()
    assert not {"numpy", "pandas", "scipy", "matplotlib", "rich", "typer"} & set(loaded.split())


def test_the_wheel_carries_the_tables_and_the_types(tmp_path):
    """`pip install .` copies what the wheel holds; an editable install would hide a missing file."""
    pytest.importorskip("hatchling")
    root = Path(__file__).resolve().parent.parent
    build = [sys.executable, "-m", "hatchling", "build", "-t", "wheel", "-d", str(tmp_path)]
    subprocess.run(build, cwd=root, capture_output=True, text=True, check=True)
    (wheel,) = tmp_path.glob("*.whl")
    names = set(zipfile.ZipFile(wheel).namelist())
    package = {p for p in (root / "homog").rglob("*") if p.suffix in {".py", ".csv", ".typed"}}
    assert {p.relative_to(root).as_posix() for p in package} <= names
    assert {"homog/materials.csv", "homog/processes.csv", "homog/py.typed"} <= names
    assert not [name for name in names if name.startswith(("tests/", "scripts/", "data/"))]
