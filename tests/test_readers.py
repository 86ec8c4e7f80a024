from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from problem_files import TABLES, write

from stackopt.errors import InputError
from stackopt.physics.permeability import ColeCole, Constant, Debye, Lorentz, Sum, Table
from stackopt.problem import (
    CoaxialDipoles,
    CoaxialLoops,
    ElectricNearField,
    MagneticNearField,
    PlaneWave,
    Sheet,
    format_stack,
)
from stackopt.readers import (
    parse_stack,
    read_level_table,
    read_mask_table,
    read_material_set,
    read_permeability_table,
    read_problem,
)
from stackopt.readers.levels import required_curve

ROOT = Path(__file__).parents[1]
LOOPS = """\
kind = "coaxial loops"
source_radius = "12 mm"
victim_radius = "5 mm"
source_gap = "20 mm"
victim_gap = "25 mm"
"""
POINTS = 'points = [["50 Hz", "8 dB"], ["1 kHz", "14 dB"], ["1 MHz", "90 dB"]]'


def test_the_base_problem(tmp_path: Path) -> None:
    problem = read_problem(write(tmp_path))
    assert (problem.title, problem.name, problem.currency) == ("Test problem", "problem", "EUR")
    assert problem.use == ("copper", "steel")
    assert problem.sheets == (
        Sheet("copper", 18e-6),
        Sheet("copper", 35e-6),
        Sheet("copper", 70e-6),
        Sheet("steel", 150e-6),
        Sheet("steel", 300e-6),
    )
    loops, wave = problem.requirements
    assert loops.field == CoaxialLoops(0.012, 0.005, 0.02, 0.025)
    assert loops.mask.frequency_hz == (50.0, 1e3, 1e6)
    assert loops.mask.attenuation_db == (8.0, 14.0, 90.0)
    assert (loops.mask.margin_db, loops.mask.points_per_decade) == (2.0, 8)
    assert wave.field == PlaneWave(0.0, "TE")
    assert wave.mask.attenuation_db == (40.0, 60.0)
    assert wave.mask.margin_db == 0.0
    assert problem.search.objectives == ("mass", "thickness")
    assert (problem.search.random_seed, problem.search.population) == (7, 50)
    assert problem.remarks == ()


def test_every_file_read_is_named_with_its_absolute_path(tmp_path: Path) -> None:
    problem = read_problem(write(tmp_path))
    names = ["problem.toml", "sets/set.toml", "sets/ribbon.csv", "mask.csv"]
    assert problem.files == tuple(str((tmp_path / name).resolve()) for name in names)


def test_materials(tmp_path: Path) -> None:
    materials = read_problem(write(tmp_path)).materials
    copper = materials["copper"]
    assert (copper.conductivity_s_per_m, copper.density_kg_per_m3) == (58e6, 8890.0)
    assert copper.tolerance.thickness == (-0.05, 0.05)
    assert copper.tolerance.permeability == (-0.5, 1.0)
    assert copper.tolerance.conductivity == (0.0, 0.0)
    assert (copper.anodic_index_v, copper.saturation_t, copper.notes) == (-0.35, None, "annealed")
    assert copper.origin["density"] == "test"
    assert materials["steel"].price(0.3e-3) == 5.5
    assert materials["steel"].permeability == ColeCole(280.0, 5e3, 0.2, 83.3)
    assert isinstance(materials["ribbon"].permeability, Table)
    assert materials["acrylic film"].gauges_m == ()
    assert materials["acrylic film"].permittivity == 3.0


@pytest.mark.parametrize(
    ("text", "field"),
    [
        ('kind = "plane wave"\nangle = "30 deg"\npolarisation = "TM"', PlaneWave(math.pi / 6.0, "TM")),
        ('kind = "magnetic near field"\ndistance = "0.3 m"', MagneticNearField(0.3)),
        ('kind = "electric near field"\ndistance = "30 cm"', ElectricNearField(0.3)),
        ('kind = "coaxial dipoles"\nsource_gap = "0 mm"\nvictim_gap = "1 inch"', CoaxialDipoles(0.0, 0.0254)),
    ],
)
def test_every_kind_of_field(tmp_path: Path, text: str, field: object) -> None:
    found = read_problem(write(tmp_path, {LOOPS: text + "\n"})).requirements[0].field
    assert type(found) is type(field)
    assert vars(found) == pytest.approx(vars(field))


@pytest.mark.parametrize(
    ("text", "law"),
    [
        ("280", Constant(280.0)),
        ('{law = "constant", initial = 280}', Constant(280.0)),
        ('{law = "debye", initial = 280, relaxation = "5 kHz"}', Debye(280.0, 5e3)),
        ('{law = "lorentz", initial = 280, resonance = "5 MHz", damping = "8 MHz", high_frequency = 2}', None),
        ('{law = "sum", terms = [{law = "debye", initial = 9, relaxation = "1 Hz"}, 3.0], intrinsic = true}', None),
    ],
)
def test_every_law(tmp_path: Path, text: str, law: object) -> None:
    old = '{law = "cole-cole", initial = 280, high_frequency = 83.3, relaxation = "5 kHz", broadening = 0.2}'
    found = read_problem(write(tmp_path, materials={old: text})).materials["steel"].permeability
    others = {"lorentz": Lorentz(280.0, 5e6, 8e6, 2.0), "sum": Sum((Debye(9.0, 1.0), Constant(3.0)))}
    assert found == (law or others["lorentz" if "lorentz" in text else "sum"])


def test_rules(tmp_path: Path) -> None:
    rules = """max_sheets = 4
max_thickness = "2 mm"
max_mass = "4 kg/m^2"
max_cost = 60
bond = {material = "acrylic film", thickness = "25 um"}
source_side = [["acrylic film", "2 mm"], ["copper", "1 mm"]]
victim_side = []
first = ["steel", "copper"]
last = ["copper"]
max_anodic_gap = "0.25 V"
cost_per_sheet = 2.5
"""
    film = 'permittivity = 3.0\nprice_per_m2 = {"0.025 mm" = 1.0}\n'
    origin = 'permittivity = "test"\nprice_per_m2 = "test"\n'
    path = write(
        tmp_path,
        {"max_sheets = 4\n": rules},
        {"permittivity = 3.0\n": film, 'permittivity = "test"\n': origin},
    )
    found = read_problem(path).rules
    assert found.max_thickness_m == 2e-3
    assert found.max_mass_kg_per_m2 == 4.0
    assert found.max_cost_per_m2 == 60.0
    assert found.bond == Sheet("acrylic film", 25e-6)
    assert found.source_side == (Sheet("acrylic film", 2e-3), Sheet("copper", 1e-3))
    assert found.victim_side == ()
    assert (found.first, found.last) == (("steel", "copper"), ("copper",))
    assert (found.max_anodic_gap_v, found.cost_per_sheet) == (0.25, 2.5)


def test_search_may_be_left_out(tmp_path: Path) -> None:
    search = '[search]\nobjectives = ["mass", "thickness"]\nrandom_seed = 7\npopulation = 50\n'
    assert read_problem(write(tmp_path, {search: ""})).search.objectives == ("mass", "cost", "thickness")


def test_without_use_every_material_with_sheets_serves(tmp_path: Path) -> None:
    path = write(
        tmp_path,
        {
            'use = ["copper", "steel"]\n': "",
            POINTS: 'points = [["1 kHz", "14 dB"]]',
            '[[requirement]]\nname = "wave"': '[[requirement]]\nname = "far"',
        },
        tables={"mask.csv": "frequency_hz,attenuation_db\n1e6,40\n"},
    )
    assert read_problem(path).use == ("copper", "steel", "ribbon")


def test_thickness_range(tmp_path: Path) -> None:
    path = write(tmp_path, materials={'gauges = ["70 um", "18 um", "35 um"]': 'thickness_range = ["18 um", "1 mm"]'})
    problem = read_problem(path)
    assert problem.continuous == ("copper",)
    assert problem.materials["copper"].thickness_range_m == (18e-6, 1e-3)


def test_windows_line_ends_and_byte_order_mark(tmp_path: Path) -> None:
    path = write(tmp_path)
    for name in ("problem.toml", "sets/set.toml", *TABLES):
        content = (tmp_path / name).read_bytes().replace(b"\n", b"\r\n")
        (tmp_path / name).write_bytes(b"\xef\xbb\xbf" + content)
    assert len(read_problem(path).requirements) == 2


def test_required_is_emitted_minus_allowed(tmp_path: Path) -> None:
    path = write(tmp_path, {POINTS: 'emitted = "emitted.csv"\nallowed = "allowed.csv"'})
    problem = read_problem(path)
    mask = problem.requirements[0].mask
    assert mask.frequency_hz == (1e3, 1e4)
    assert mask.attenuation_db == pytest.approx((30.0, 20.0))
    assert len(problem.remarks) == 1
    assert "loops: the emitted level runs from 1 kHz to 100 kHz" in problem.remarks[0]
    assert "from 1 kHz to 10 kHz" in problem.remarks[0]


def test_required_is_never_below_0_db_and_bends_where_levels_cross() -> None:
    frequency, required, remarks = required_curve(((1e2, 1e4), (40.0, 60.0)), ((1e2, 1e4), (50.0, 50.0)))
    assert frequency == pytest.approx((1e2, 1e3, 1e4))
    assert required == pytest.approx((0.0, 0.0, 10.0))
    assert remarks == []
    quiet = required_curve(((1e2, 1e4), (40.0, 40.0)), ((1e2, 1e4), (50.0, 50.0)))
    assert quiet[1] == (0.0, 0.0)
    assert "no attenuation is required" in quiet[2][0]


def test_tables_may_hold_remarks_blanks_and_empty_lines(tmp_path: Path) -> None:
    path = tmp_path / "mask.csv"
    path.write_text("# invented\n\n frequency_hz , attenuation_db\n0, 3\n# half way\n1e3 ,\t4.5\n\n", encoding="utf-8")
    assert read_mask_table(path) == ((0.0, 1e3), (3.0, 4.5))


def test_single_tables(tmp_path: Path) -> None:
    write(tmp_path)
    assert read_level_table(tmp_path / "emitted.csv") == ((1e3, 1e5), (80.0, 60.0))
    assert read_permeability_table(str(tmp_path / "sets" / "ribbon.csv")).mu_imag[0] == -10.0


def test_material_set_alone(tmp_path: Path) -> None:
    write(tmp_path)
    material_set = read_material_set(tmp_path / "sets" / "set.toml")
    assert (material_set.title, material_set.currency) == ("Test sheets", "EUR")
    assert list(material_set.materials) == ["copper", "steel", "ribbon", "acrylic film"]
    assert dict(material_set.remarks) == {}


def test_tables_of_the_problem_may_lie_beside_the_set(tmp_path: Path) -> None:
    folder = tmp_path / "problems"
    folder.mkdir()
    write(tmp_path)
    text = (tmp_path / "problem.toml").read_text(encoding="utf-8")
    text = text.replace('"sets/set.toml"', '"../sets/set.toml"').replace('"mask.csv"', '"../sets/mask.csv"')
    (folder / "problem.toml").write_text(text, encoding="utf-8")
    (tmp_path / "sets" / "mask.csv").write_text(TABLES["mask.csv"], encoding="utf-8")
    assert read_problem(folder / "problem.toml").requirements[1].mask.frequency_hz == (1e6, 1e9)


def test_tables_elsewhere_only_on_demand(tmp_path: Path) -> None:
    folder = tmp_path / "inner"
    folder.mkdir()
    path = write(folder, {'file = "mask.csv"': 'file = "../mask.csv"'})
    (tmp_path / "mask.csv").write_text(TABLES["mask.csv"], encoding="utf-8")
    with pytest.raises(InputError, match="lies outside the folders"):
        read_problem(path)
    assert len(read_problem(path, allow_outside=True).requirements) == 2


def test_a_link_does_not_lead_outside(tmp_path: Path) -> None:
    folder = tmp_path / "inner"
    folder.mkdir()
    path = write(folder)
    (folder / "mask.csv").rename(tmp_path / "mask.csv")
    (folder / "mask.csv").symlink_to(tmp_path / "mask.csv")
    with pytest.raises(InputError, match="lies outside the folders"):
        read_problem(path)


REMARKS = {
    "one octave outside": (
        {'use = ["copper", "steel"]': 'use = ["ribbon"]', POINTS: 'points = [["50 Hz", "1 dB"], ["1 kHz", "2 dB"]]'},
        {},
        "loops: the mask reaches up to one octave outside the permeability table of 'ribbon' (100 Hz to 1 MHz)",
    ),
    "not intrinsic": (
        {},
        {"broadening = 0.2}": "broadening = 0.2, intrinsic = false}"},
        "steel: its permeability is not intrinsic",
    ),
    "term not intrinsic": (
        {},
        {
            'permeability = {law = "cole-cole", initial = 280, high_frequency = 83.3, relaxation = "5 kHz", '
            "broadening = 0.2}": 'permeability = {law = "sum", terms = '
            '[{law = "debye", initial = 9, relaxation = "1 kHz", intrinsic = false}]}'
        },
        "steel: its permeability is not intrinsic",
    ),
    "large loop": (
        {'source_radius = "12 mm"': 'source_radius = "300 mm"'},
        {},
        "loops: a loop of 300mm radius is more than 5 times as large as the distance of 45mm",
    ),
    "far field": (
        {'["1 MHz", "90 dB"]': '["4 GHz", "90 dB"]'},
        {},
        "loops: at 4 GHz source and victim, 45mm apart, are in each other's far field; a plane wave describes",
    ),
}


@pytest.mark.parametrize("name", REMARKS)
def test_remarks(tmp_path: Path, name: str) -> None:
    problem_changes, set_changes, text = REMARKS[name]
    tables = {"mask.csv": "frequency_hz,attenuation_db\n1e6,40\n"}
    problem = read_problem(write(tmp_path, problem_changes, set_changes, tables))
    assert len(problem.remarks) == 1
    assert problem.remarks[0].startswith(text)


def test_implausible_table_is_remarked(tmp_path: Path) -> None:
    rows = "".join(f"{f:g},{mu:g},0\n" for f, mu in zip(np.geomspace(10, 1e9, 9), np.linspace(900, 1, 9), strict=True))
    problem = {'use = ["copper", "steel"]': 'use = ["ribbon"]'}
    path = write(tmp_path, problem, tables={"sets/ribbon.csv": "frequency_hz,mu_real,mu_imag\n" + rows})
    assert "Kramers-Kronig" in read_problem(path).remarks[0]
    assert "Kramers-Kronig" in read_material_set(tmp_path / "sets" / "set.toml").remarks["ribbon"][0]


def test_remarks_on_materials_out_of_use_are_left_out(tmp_path: Path) -> None:
    path = write(
        tmp_path,
        {'use = ["copper", "steel"]': 'use = ["copper"]'},
        {"broadening = 0.2}": "broadening = 0.2, intrinsic = false}"},
    )
    assert read_problem(path).remarks == ()


def test_sums_may_nest(tmp_path: Path) -> None:
    law = '{law = "debye", initial = 9, relaxation = "1 kHz"}'
    for _ in range(3):
        law = f'{{law = "sum", terms = [{law}]}}'
    path = write(tmp_path, materials={"permeability = 1.0": f"permeability = {law}"})
    assert read_problem(path).materials["copper"].permeability(np.array([0.0]))[0] == pytest.approx(9.0)


@pytest.mark.parametrize(
    ("text", "stack"),
    [
        ("copper 35um", [("copper", 35e-6)]),
        ("  steel   0.15 mm/copper 35 um ", [("steel", 150e-6), ("copper", 35e-6)]),
        ("acrylic film 1 mil / 80 % nickel 1e-1mm", [("acrylic film", 25.4e-6), ("80 % nickel", 1e-4)]),
        ("80 2 mm", [("80", 2e-3)]),
        ("copper 123.456 um", [("copper", 123.456e-6)]),
    ],
)
def test_stacks_are_read(text: str, stack: list[tuple[str, float]]) -> None:
    names = ["copper", "steel", "acrylic film", "80 % nickel", "80"]
    assert parse_stack(text, names) == tuple(Sheet(name, thickness) for name, thickness in stack)


def test_stacks_are_written_as_they_are_read(tmp_path: Path) -> None:
    problem = read_problem(write(tmp_path))
    for sheet in problem.sheets:
        assert parse_stack(format_stack((sheet, *problem.sheets)), problem.materials) == (sheet, *problem.sheets)


@pytest.mark.parametrize(
    ("text", "messages"),
    [
        ("", ["sheet 1: found nothing"]),
        (
            "copper",
            ["stack 'copper', sheet 1: found 'copper', which has no thickness; write a material and a thickness"],
        ),
        ("acrylic film", ["which has no thickness"]),
        ("35um", ["found '35um', which has no thickness"]),
        ("coper 35um", ["found 'coper', which the material set does not hold; did you mean 'copper'?"]),
        ("copper 35", ["found '35', which has no unit"]),
        ("copper 0 um", ["found '0 um'; it must be above 0 mm and at most 1 m"]),
        ("copper -35um", ["found '-35um'; it must be above 0 mm"]),
        ("copper 35um steel 35um", ["found 'copper 35um steel', which the material set does not hold"]),
        ("copper 35kg", ["found '35kg', which is not a length"]),
        ("stel 1um / copper 1um / tin 1um", ["sheet 1: found 'stel'", "sheet 3: found 'tin'"]),
    ],
)
def test_bad_stacks_are_refused(text: str, messages: list[str]) -> None:
    with pytest.raises(InputError) as caught:
        parse_stack(text, ["copper", "steel", "acrylic film"])
    assert len(caught.value.findings) == len(messages)
    for message in messages:
        assert message in str(caught.value)


@pytest.mark.parametrize("path", sorted((ROOT / "problems").glob("*.toml")), ids=lambda path: path.stem)
def test_the_examples_can_be_read(path: Path) -> None:
    problem = read_problem(path)
    assert not problem.continuous
    assert len(problem.sheets) >= 12
    assert problem.remarks == ()


@pytest.mark.parametrize("path", sorted((ROOT / "material_sets").glob("*.toml")), ids=lambda path: path.stem)
def test_the_material_sets_say_where_numbers_come_from(path: Path) -> None:
    material_set = read_material_set(path)
    assert not material_set.remarks
    for material in material_set.materials.values():
        prices = [text for key, text in material.origin.items() if key.startswith("price")]
        assert all(text == "invented for the demonstration" for text in prices)
        assert np.all(material.permeability(np.array([50.0, 1e4, 1e6, 1e9])).imag <= 0.0)
