"""Setup files and everything that can be wrong with them."""

from __future__ import annotations

from pathlib import Path

import bench_files
import pytest

from stackopt.errors import InputError
from stackopt.physics.permeability import Debye
from stackopt.problem import CoaxialDipoles, CoaxialLoops
from stackopt.readers.setups import read_setup

IMPOSSIBLE = '{law = "debye", initial = 0.5, relaxation = "1 Hz"}'
NO_GAPS = 'source_gap = "0 mm"\nvictim_gap = "0 mm"'


def test_a_full_setup(tmp_path: Path) -> None:
    text = bench_files.SETUP.replace(
        "permeability = 1.0", 'permeability = {law = "debye", initial = 100, relaxation = "1 MHz"}'
    )
    text = text.replace("[known]", '[uncertainty]\ngaps = "0.2 mm"\nnoise = "0.3 dB"\n[known]', 1)
    text += 'count = 3\nspacing = "20 um"\nvictim_gap = "5 mm"\n'
    setup = read_setup(bench_files.write_setup(tmp_path, text))
    assert setup.field == CoaxialLoops(4e-3, 4e-3, 3e-3, 4e-3)
    assert setup.permeability == Debye(100.0, 1e6)
    assert setup.conductivity_s_per_m is None
    assert setup.uncertainty.gaps_m == pytest.approx(0.2e-3)
    assert setup.uncertainty.noise_db == pytest.approx(0.3)
    assert setup.uncertainty.thickness == pytest.approx(0.05)
    (entry,) = setup.sweeps
    assert (entry.count, entry.spacing_m, entry.field.victim_gap_m) == (3, pytest.approx(20e-6), pytest.approx(5e-3))
    assert setup.entry["density"] == "8890 kg/m^3"
    assert setup.origin["density"] == "weighed"
    assert setup.date == "2024-03-02"


def test_dipoles(tmp_path: Path) -> None:
    text = bench_files.SETUP.replace("coaxial loops", "coaxial dipoles")
    text = text.replace('source_radius = "4 mm"\nvictim_radius = "4 mm"\n', "")
    assert read_setup(bench_files.write_setup(tmp_path, text)).field == CoaxialDipoles(3e-3, 4e-3)


@pytest.mark.parametrize(
    ("old", "new", "parts"),
    [
        ('kind = "coaxial loops"', 'kind = "loops"', ["field.kind", "coaxial loops"]),
        ('source_gap = "3 mm"', "source_gap = 3", ["field.source_gap", "no unit"]),
        ('source_gap = "3 mm"', 'sourcegap = "3 mm"', ["field.sourcegap", "did you mean 'source_gap'"]),
        ('thickness = "35 um"', 'thickness = "0 um"', ["sweep[1].thickness", "above 0 mm"]),
        ('thickness = "35 um"', 'thickness = "35 um"\ncount = 0', ["sweep[1].count", "from 1 to 100"]),
        ('file = "copper.csv"', 'file = "gold.csv"', ["gold.csv", "does not exist"]),
        ('file = "copper.csv"', 'file = "../../x.csv"', ["sweep[1].file", "outside the folders"]),
        ('file = "copper.csv"', "", ["sweep[1].file", "is missing"]),
        ('date = "2024-03-02"', 'date = "yesterday"', ["date", "2024-05-17"]),
        ("permeability = 1.0", "permeability = -1", ["known.permeability", "above 0"]),
        ("permeability = 1.0", f"permeability = {IMPOSSIBLE}", ["known.permeability.initial"]),
        ("[known]", '[uncertainty]\nthickness = "80 %"\n[known]', ["uncertainty.thickness", "50 %"]),
        ("[[sweep]]", "[[sweeps]]", ["sweeps", "did you mean 'sweep'", "sweep: is missing"]),
        ("[known]", "[known", ["not valid TOML"]),
        ('thickness = "35 um"', f'thickness = "35 um"\n{NO_GAPS}', ["sweep[1]", "0 mm on both sides"]),
    ],
)
def test_mistakes(tmp_path: Path, old: str, new: str, parts: list[str]) -> None:
    assert old in bench_files.SETUP
    path = bench_files.write_setup(tmp_path, bench_files.SETUP.replace(old, new, 1))
    with pytest.raises(InputError) as caught:
        read_setup(path)
    for part in parts:
        assert part in str(caught.value)


def test_a_plane_wave_is_no_bench(tmp_path: Path) -> None:
    start, end = bench_files.SETUP.index("kind"), bench_files.SETUP.index("[known]")
    text = bench_files.SETUP[:start] + 'kind = "plane wave"\n' + bench_files.SETUP[end:]
    with pytest.raises(InputError, match="coaxial loops or coaxial dipoles"):
        read_setup(bench_files.write_setup(tmp_path, text))


def test_mistakes_of_setup_and_sweep_come_together(tmp_path: Path) -> None:
    path = bench_files.write_setup(tmp_path, bench_files.SETUP.replace('source_gap = "3 mm"', "source_gap = 3"))
    (tmp_path / "copper.csv").write_text("frequency_hz,attenuation_db\n1,x\n")
    with pytest.raises(InputError) as caught:
        read_setup(path)
    assert "field.source_gap" in str(caught.value)
    assert "column 2" in str(caught.value)


def test_a_known_table_must_reach(tmp_path: Path) -> None:
    (tmp_path / "mu.csv").write_text("frequency_hz,mu_real,mu_imag\n1e3,100,-1\n1e4,90,-5\n")
    text = bench_files.SETUP.replace("permeability = 1.0", 'permeability = {law = "table", file = "mu.csv"}')
    with pytest.raises(InputError, match="found a table from 1 kHz to 10 kHz"):
        read_setup(bench_files.write_setup(tmp_path, text))
