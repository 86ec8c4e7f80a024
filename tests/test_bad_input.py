"""The mistakes a user can make in a file, and what the message must say: where, what was found, what is allowed."""

from __future__ import annotations

import contextlib
import os
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest
from problem_files import TABLES, write

import stackopt.readers.material_sets as material_sets
import stackopt.readers.problems as problems
from stackopt.errors import InputError
from stackopt.readers import read_level_table, read_mask_table, read_material_set, read_permeability_table, read_problem

POINTS = 'points = [["50 Hz", "8 dB"], ["1 kHz", "14 dB"], ["1 MHz", "90 dB"]]'
STEEL = '{law = "cole-cole", initial = 280, high_frequency = 83.3, relaxation = "5 kHz", broadening = 0.2}'
STACK = "max_sheets = 4\n"
BOND = STACK + 'bond = {material = "acrylic film", thickness = "25 um"}\n'
P, S = "problem.toml: ", "sets/set.toml: "


@dataclass(frozen=True)
class Case:
    """Changes to the valid files, and one text for each finding they must cause."""

    messages: tuple[str, ...]
    problem: Mapping[str, str] = field(default_factory=dict)
    materials: Mapping[str, str] = field(default_factory=dict)
    tables: Mapping[str, str | bytes] = field(default_factory=dict)


def problem(old: str, new: str, *messages: str) -> Case:
    return Case(messages, problem={old: new})


def materials(old: str, new: str, *messages: str) -> Case:
    return Case(messages, materials={old: new})


def table(name: str, content: str | bytes, *messages: str) -> Case:
    return Case(messages, tables={name: content})


def mask_table(rows: str, *messages: str) -> Case:
    return table("mask.csv", "frequency_hz,attenuation_db\n" + rows, *messages)


CASES = {
    # the problem file as a whole
    "toml syntax": problem(
        "max_sheets = 4", "max_sheets 4", P + "is not valid TOML: Expected '=' after a key", "line 25"
    ),
    "key twice": problem(STACK, STACK * 2, P + "is not valid TOML: Cannot overwrite a value"),
    "unknown key at the top": problem(
        "title =", "titel =", P + "titel: unknown key; did you mean 'title'?", P + "title: is"
    ),
    "title empty": problem('"Test problem"', '" "', P + "title: found ' '; write some text in quotes"),
    "title not finite": problem('"Test problem"', "nan", P + "title: found nan; write some text in quotes"),
    "requirement single brackets": problem(
        '[[requirement]]\nname = "wave"',
        '[requirement_]\nname = "wave"',
        "is not valid TOML",
    ),
    "no stack": problem("[stack]\n" + STACK, "", P + "stack: is missing; write it, such as stack = {max_sheets = 4}"),
    "number too long": problem("random_seed = 7", "random_seed = " + "7" * 5000, P + "holds a number that is too long"),
    "deep lists": problem('"Test problem"', "[" * 5000, P + "nests tables or lists too deeply; up to 12 levels"),
    "deep keys": problem('title = "Test problem"', "a" + ".a" * 1500 + " = 1", P + "nests tables or lists too deeply"),
    # the material set and its file
    "set missing": problem(
        '"sets/set.toml"',
        '"sets/none.toml"',
        P + "materials: found 'sets/none.toml'; ",
        "none.toml does not exist; check",
    ),
    "set is a folder": problem(
        '"sets/set.toml"', '"sets"', P + "materials: found 'sets'; ", "sets is a folder; name a file"
    ),
    "set is no text": problem('"sets/set.toml"', "3", P + "materials: found 3; write some text in quotes"),
    "set left out": problem(
        'materials = "sets/set.toml"\n', "", P + "materials: is missing; write it, such as materials ="
    ),
    "set syntax": materials('currency = "EUR"', "currency = EUR", S + "is not valid TOML", "line 2"),
    "set without currency": materials(
        'currency = "EUR"\n', "", S + 'currency: is missing; write it, such as currency = "EUR"'
    ),
    # names
    "use unknown": problem(
        '["copper", "steel"]',
        '["coper", "steel"]',
        P + "use[1]: found 'coper', which the material set does not hold; did you mean 'copper'? Known: copper, ",
    ),
    "use twice": problem('["copper", "steel"]', '["copper", "copper"]', P + "use[2]: found 'copper' more than once"),
    "use empty": problem(
        '["copper", "steel"]', "[]", P + "use: found an empty list; write at least one entry or leave"
    ),
    "use no list": problem('["copper", "steel"]', '"copper"', P + "use: found 'copper'; write a list in brackets"),
    "use without sheets": problem(
        '["copper", "steel"]',
        '["copper", "acrylic film"]',
        P + "use[2]: found 'acrylic film', which has neither gauges nor thickness_range",
    ),
    "first unknown": problem(
        STACK, STACK + 'first = ["stel"]\n', P + "stack.first[1]: found 'stel'", "did you mean 'steel'"
    ),
    "last out of use": problem(
        STACK,
        STACK + 'last = ["copper", "ribbon"]\n',
        P + "stack.last[2]: found 'ribbon', which is not in use; add it to use",
    ),
    "bond unknown": problem(
        STACK,
        BOND.replace("acrylic film", "acrilic film"),
        P + "stack.bond.material: found 'acrilic film'",
        "'acrylic film'",
    ),
    "wall unknown": problem(
        STACK,
        STACK + 'victim_side = [["wood", "2 mm"]]\n',
        P + "stack.victim_side[1]: found 'wood', which the material set",
    ),
    # fields
    "kind missing": problem(
        'kind = "plane wave"\n', "", P + "requirement[2].field.kind: is missing; Known: plane wave, mag"
    ),
    "kind unknown": problem(
        '"plane wave"', '"plain wave"', P + "requirement[2].field.kind: found 'plain wave'; did you mean 'plane wave'?"
    ),
    "kind no text": problem('"plane wave"', "[1]", P + "requirement[2].field.kind: found [1]; Known: plane wave"),
    "field key unknown": problem(
        'source_gap = "20 mm"',
        'source_gap = "20 mm"\nsorce_gap = "20 mm"',
        P + "requirement[1].field.sorce_gap: unknown key; did you mean 'source_gap'? Known: kind, source_gap",
    ),
    "field key of another kind": problem(
        'kind = "plane wave"',
        'kind = "plane wave"\ndistance = "1 m"',
        P + "requirement[2].field.distance: unknown key; ",
        "Known: kind, angle, polarisation",
    ),
    "field key missing": problem(
        'victim_gap = "25 mm"\n',
        "",
        P + 'requirement[1].field.victim_gap: is missing; write it, such as victim_gap = "25 mm"',
    ),
    "no unit": problem(
        'source_gap = "20 mm"',
        "source_gap = 20",
        P + "requirement[1].field.source_gap: found 20, which has no unit; write the length as text with its unit",
    ),
    "wrong unit": problem(
        '"12 mm"', '"12 kg"', P + "requirement[1].field.source_radius: found '12 kg', which is not a length"
    ),
    "negative gap": problem(
        '"20 mm"', '"-20 mm"', P + "requirement[1].field.source_gap: found '-20 mm'; it must be at least 0"
    ),
    "no gap at all": Case(
        (P + "requirement[1].field.victim_gap: found 0 mm on both sides",),
        problem={'"20 mm"': '"0 mm"', '"25 mm"': '"0 mm"'},
    ),
    "angle too large": problem(
        '"plane wave"\n',
        '"plane wave"\nangle = "90 deg"\n',
        P + "requirement[2].field.angle: found '90 deg'; it must be at least 0 deg and at most 89.9 deg",
    ),
    "polarisation unknown": problem(
        '"plane wave"\n',
        '"plane wave"\npolarisation = "XX"\n',
        P + "requirement[2].field.polarisation: found 'XX'; ",
        "TE, TM",
    ),
    "distance zero": problem(
        '"plane wave"\n',
        '"electric near field"\ndistance = "0 m"\n',
        P + "requirement[2].field.distance: found '0 m'; it must be above 0 mm",
    ),
    "names twice": problem('"wave"', '"loops"', P + "requirement[2].name: found 'loops' a second time"),
    # masks
    "mask empty": problem(
        POINTS, "", P + "requirement[1].mask: found no attenuation; write one of: points, file, or emitted"
    ),
    "mask in two ways": problem(
        'file = "mask.csv"',
        'file = "mask.csv"\npoints = [["1 MHz", "4 dB"]]',
        P + "requirement[2].mask: found points and file; write one of",
    ),
    "emitted alone": problem(
        'file = "mask.csv"',
        'emitted = "emitted.csv"',
        P + "requirement[2].mask: found emitted; write one of: points, file, or",
    ),
    "points fall": problem(
        '"1 kHz"', '"10 Hz"', P + "requirement[1].mask.points[2]: found 10 Hz after 50 Hz; frequencies must"
    ),
    "point no pair": problem(
        '["1 kHz", "14 dB"]', '["1 kHz"]', P + "requirement[1].mask.points[2]: found ['1 kHz']; write a"
    ),
    "point without unit": problem(
        '"14 dB"', '"14"', P + "requirement[1].mask.points[2]: found '14', which has no unit; write dB"
    ),
    "point negative": problem(
        '"14 dB"', '"-14 dB"', P + "requirement[1].mask.points[2]: found '-14 dB'; it must be at least 0"
    ),
    "margin negative": problem(
        '"2 dB"', '"-2 dB"', P + "requirement[1].mask.margin: found '-2 dB'; it must be at least 0 dB"
    ),
    "density zero": problem(
        POINTS,
        POINTS + "\npoints_per_decade = 0",
        P + "requirement[1].mask.points_per_decade: found 0; write a whole number from 1",
    ),
    "levels apart": Case(
        (P + "requirement[1].mask.allowed: runs from 1 MHz to 2 MHz, but emitted runs from 1 kHz to 100 kHz",),
        problem={POINTS: 'emitted = "emitted.csv"\nallowed = "allowed.csv"'},
        tables={"allowed.csv": "frequency_hz,level_db\n1e6,1\n2e6,1\n"},
    ),
    "plane wave at 0 Hz": mask_table(
        "0,3\n1e3,4\n", P + "requirement[2].mask: found 0 Hz, but a plane wave of 0 Hz does not"
    ),
    "electric field at 0 Hz": Case(
        (P + "requirement[2].mask: found 0 Hz, but any conductor shields a static electric field completely",),
        problem={'"plane wave"\n': '"electric near field"\ndistance = "1 m"\n'},
        tables={"mask.csv": "frequency_hz,attenuation_db\n0,3\n"},
    ),
    "table at 0 Hz": Case(
        (P + "requirement[1].mask: found 0 Hz, but the permeability of 'ribbon' is a table",),
        problem={'["copper", "steel"]': '["ribbon"]', '"50 Hz"': '"0 Hz"'},
        tables={"mask.csv": "frequency_hz,attenuation_db\n1e6,40\n"},
    ),
    "beyond the octave": Case(
        (
            P + "requirement[1].mask: found 10 Hz to 1 MHz, but the permeability table of 'ribbon' runs from 100 Hz",
            P + "requirement[2].mask: found 1 MHz to 1 GHz",
        ),
        problem={'["copper", "steel"]': '["copper", "ribbon"]', '"50 Hz"': '"10 Hz"'},
    ),
    # tables
    "table missing": problem(
        '"mask.csv"', '"mosk.csv"', P + "requirement[2].mask.file: found 'mosk.csv'; ", "does not exist"
    ),
    "table not UTF-8": table(
        "mask.csv",
        b"frequency_hz,attenuation_db\n1,2 \xb5\n",
        P + "requirement[2].mask.file: found 'mask.csv'; ",
        "(line 2)",
    ),
    "header wrong": table(
        "mask.csv", "f,a\n1,2\n", "mask.csv: line 1: found 'f,a'; the header must be frequency_hz,attenuation_db"
    ),
    "table empty": table("mask.csv", "", "mask.csv: line 1: found nothing; the header must be"),
    "no rows": mask_table("", "mask.csv: has a header but no numbers"),
    "columns": mask_table("1,2,3\n", "mask.csv: line 2: found 3 columns; write 2: frequency_hz,attenuation_db"),
    "no number": mask_table("1e6,4\n2e6,x\n", "mask.csv: line 3: found 'x' as attenuation_db; write a finite number"),
    "table nan": mask_table("1e6,nan\n", "mask.csv: line 2: found 'nan' as attenuation_db; write a finite number"),
    "table inf": mask_table("inf,3\n", "mask.csv: line 2: found 'inf' as frequency_hz; write a finite number"),
    "table falls": mask_table(
        "2e6,1\n1e6,1\n", "mask.csv: line 3: found 1000000 Hz after 2000000 Hz; frequencies must rise"
    ),
    "table negative": mask_table("1e6,-40\n", "mask.csv: line 2: found attenuation_db -40 dB; write the required"),
    "frequency negative": mask_table("-1,4\n", "mask.csv: line 2: found frequency_hz -1 Hz; it must be above 0 Hz"),
    "two lines": mask_table("a,1\n1,b\n", "mask.csv: line 2: found 'a'", "mask.csv: line 3: found 'b'"),
    "gain instead of loss": table(
        "sets/ribbon.csv",
        "frequency_hz,mu_real,mu_imag\n1e2,5000,10\n1e6,400,-1\n",
        "sets/ribbon.csv: line 2: found mu_imag 10; it must be 0 or less",
        "flip the sign of the column",
    ),
    "permeability of one line": table(
        "sets/ribbon.csv",
        "frequency_hz,mu_real,mu_imag\n1e2,5000,-10\n",
        "ribbon.csv: has one line of numbers; a permeab",
    ),
    # materials
    "material key": materials(
        "density =",
        "densitty =",
        S + "materials.copper.densitty: unknown key; did you mean 'density'?",
        S + "materials.copper.density: is missing",
    ),
    "material no table": materials(
        '[materials.copper]\nconductivity = "58 MS/m"',
        '[materials]\nbrass = 3\n[materials.copper]\nconductivity = "58 MS/m"',
        S + "materials.brass: found 3; write a table",
    ),
    "density missing": materials(
        'density = "8890 kg/m^3"\n',
        "",
        S + 'materials.copper.density: is missing; write it, such as density = "8930 kg/m^3"',
    ),
    "density zero kg": materials(
        '"8890 kg/m^3"', '"0 kg/m^3"', S + "materials.copper.density: found '0 kg/m^3'; it must be above"
    ),
    "conductivity negative": materials(
        '"58 MS/m"', '"-58 MS/m"', S + "materials.copper.conductivity: found '-58 MS/m'; it must be at least 0 S/m"
    ),
    "permittivity inf": materials(
        "permittivity = 3.0", "permittivity = inf", S + 'materials."acrylic film".permittivity: found inf'
    ),
    "permeability text": materials(
        "permeability = 1.0",
        'permeability = "1.0"',
        S + "materials.copper.permeability: found '1.0'; write a number such as 1.0",
    ),
    "permeability nan": materials(
        "permeability = 1.0", "permeability = nan", S + "materials.copper.permeability: found nan; write"
    ),
    "permeability true": materials(
        "permeability = 1.0", "permeability = true", S + "materials.copper.permeability: found true"
    ),
    "law unknown": materials(
        '"cole-cole"', '"coal-cole"', S + "materials.steel.permeability.law: found 'coal-cole'; did you mean"
    ),
    "law missing": materials(
        'law = "cole-cole", ', "", S + "materials.steel.permeability.law: is missing; Known: constant, debye"
    ),
    "law key missing": materials(
        ", broadening = 0.2", "", S + "materials.steel.permeability.broadening: is missing; write it, such"
    ),
    "law key unknown": materials(
        "broadening = 0.2",
        "broadening = 0.2, brodening = 1",
        S + "materials.steel.permeability.brodening: unknown key; did you mean",
    ),
    "broadening of 1": materials(
        "broadening = 0.2",
        "broadening = 1",
        S + "materials.steel.permeability.broadening: found 1; it must be at least 0 and at",
    ),
    "relaxation zero": materials(
        '"5 kHz"', '"0 Hz"', S + "materials.steel.permeability.relaxation: found '0 Hz'; it must be above"
    ),
    "active material": materials(
        "initial = 280",
        "initial = 28",
        S + "materials.steel.permeability.initial: found 28, below the high-frequency value 83.3",
    ),
    "active term": materials(
        STEEL,
        '{law = "sum", terms = [2.0, {law = "debye", initial = 0.5, relaxation = "1 kHz"}]}',
        S + "materials.steel.permeability.terms[2].initial: found 0.5, below the high-frequency value 1",
    ),
    "term unknown key": materials(
        STEEL,
        '{law = "sum", terms = [{law = "debye", initial = 5, relaxation = "1 kHz", damping = "1 Hz"}]}',
        S + "materials.steel.permeability.terms[1].damping: unknown key; Known: law, intrinsic, initial",
    ),
    "sum of nothing": materials(
        STEEL, '{law = "sum", terms = []}', S + "materials.steel.permeability.terms: found an empty list"
    ),
    "gauge twice": materials('"18 um"', '"0.07 mm"', S + "materials.copper.gauges: found 70um more than once"),
    "gauge negative": materials(
        '"18 um"', '"-18 um"', S + "materials.copper.gauges[2]: found '-18 um'; it must be above 0 mm and"
    ),
    "gauge of kilometres": materials(
        '"18 um"', '"18 km"', S + "materials.copper.gauges[2]: found '18 km'", "at most 1 m"
    ),
    "gauges and range": materials(
        "price_per_kg = 14.0",
        'price_per_kg = 14.0\nthickness_range = ["1 mm", "2 mm"]',
        S + "materials.copper.thickness_range: found beside gauges; write one of the two",
    ),
    "range falls": materials(
        'gauges = ["70 um", "18 um", "35 um"]',
        'thickness_range = ["2 mm", "1 mm"]',
        S + "materials.copper.thickness_range: found ['2mm', '1mm']; write the smallest and the largest",
    ),
    "price negative": materials(
        "= 14.0", "= -14.0", S + "materials.copper.price_per_kg: found -14.0; it must be at least 0"
    ),
    "price of no gauge": materials(
        '"150 um" = 3.0',
        '"100 um" = 3.0',
        S + 'materials.steel.price_per_m2."100 um": found a price for 100 um, which is no gauge',
    ),
    "tolerance of 100 %": materials(
        'thickness = "5 %"',
        'thickness = "100 %"',
        S + "materials.copper.tolerance.thickness: found '100 %'; a tolerance to both",
    ),
    "tolerance reversed": materials(
        '["-50 %", "+100 %"]',
        '["50 %", "-10 %"]',
        S + "materials.copper.tolerance.permeability: found ['50 %', '-10 %']; the first",
    ),
    "tolerance of a third": materials(
        'thickness = "5 %"',
        'density = "5 %"',
        S + "materials.copper.tolerance.density: unknown key; ",
        "Known: thickness, cond",
    ),
    "origin left out": materials(
        '[materials.copper.origin]\nconductivity = "test"\ndensity = "test"',
        '[materials.copper.origin]\nconductivity = "test"',
        S + "materials.copper.origin.density: is missing; say where the density comes from",
    ),
    "no origin": materials(
        '[materials.ribbon.origin]\nconductivity = "test"\ndensity = "test"\npermeability = "test"\n',
        "",
        S + "materials.ribbon.origin: is missing; write it, such as origin = ",
    ),
    "name with a slash": Case(
        (S + 'materials."cop/per": a material\'s name may hold letters, figures and single blanks',),
        problem={'["copper", "steel"]': '["steel"]'},
        materials={
            "[materials.copper]": '[materials."cop/per"]',
            "[materials.copper.origin]": '[materials."cop/per".origin]',
        },
    ),
    # stack rules
    "no sheets": problem(STACK, "max_sheets = 0\n", P + "stack.max_sheets: found 0; write a whole number from 1 to 20"),
    "too many sheets": problem(
        STACK, "max_sheets = 21\n", P + "stack.max_sheets: found 21; write a whole number from 1 to 20"
    ),
    "half a sheet": problem(STACK, "max_sheets = 2.5\n", P + "stack.max_sheets: found 2.5; write a whole number"),
    "limit negative": problem(
        STACK, STACK + 'max_mass = "-1 kg/m^2"\n', P + "stack.max_mass: found '-1 kg/m^2'; it must be above 0 kg/m^2"
    ),
    "limit inf": problem(
        STACK, STACK + "cost_per_sheet = inf\n", P + "stack.cost_per_sheet: found inf; write a finite number"
    ),
    "limit excludes all": problem(
        STACK,
        STACK + 'max_thickness = "10 um"\nmax_mass = "10 g/m^2"\nmax_cost = 1.5\n',
        P + "stack.max_thickness: found 0.01 mm, which excludes every sheet in use: the smallest, copper 18um, has",
        P + "stack.max_mass: found 0.01 kg/m^2, which excludes every sheet in use: the smallest, copper 18um, ha",
        P + "stack.max_cost: found 1.5 per m^2 with its handling, which excludes every sheet in use: ",
    ),
    "bond thickness": problem(
        STACK, BOND.replace("25 um", "0 um"), P + "stack.bond.thickness: found '0 um'; it must be above 0 mm"
    ),
    "wall no pair": problem(
        STACK,
        STACK + 'source_side = ["copper"]\n',
        P + "stack.source_side[1]: found 'copper'; write a layer as a material and a",
    ),
    "anodic index missing": problem(
        STACK, STACK + 'max_anodic_gap = "0.25 V"\n', P + "stack.max_anodic_gap: needs the anodic_index of 'steel'"
    ),
    "bond of metal": problem(
        STACK,
        BOND.replace("acrylic film", "copper") + 'max_anodic_gap = "0.25 V"\n',
        P + "stack.bond.material: found 'copper', a metal, which does not insulate",
    ),
    "cost of a priceless material": problem(
        '["copper", "steel"]\n\n[[requirement]]\nname = "loops"',
        '["copper", "acrylic film"]\n\n[[requirement]]\nname = "loops"',
        "which has neither gauges",
    ),
    "cost limit without price": Case(
        (P + "stack.max_cost: a cost limit is given, but 'steel' has no price for 150um; give it price_per_kg or",),
        problem={STACK: STACK + "max_cost = 60\n"},
        materials={'"150 um" = 3.0, ': ""},
    ),
    "cost of the bond": Case(
        (P + "search.objectives: cost is an objective, but the bond 'acrylic film 25um' has no price",),
        problem={STACK: BOND, '["mass", "thickness"]': '["mass", "cost"]'},
    ),
    "cost by default": Case(
        (P + "search.objectives: cost is an objective (it is unless objectives are written), but 'copper' has no",),
        problem={'objectives = ["mass", "thickness"]\n': ""},
        materials={"price_per_kg = 14.0\n": ""},
    ),
    # search
    "objective unknown": problem(
        '"mass"', '"mas"', P + "search.objectives[1]: found 'mas'; did you mean 'mass'? Known: mass, cost"
    ),
    "objective twice": problem('"thickness"]', '"mass"]', P + "search.objectives[2]: found 'mass' more than once"),
    "no objective": problem(
        '["mass", "thickness"]', "[]", P + "search.objectives: found an empty list; write at least one"
    ),
    "seed negative": problem(
        "random_seed = 7", "random_seed = -7", P + "search.random_seed: found -7; write a whole number from 0"
    ),
    "population text": problem(
        "= 50", '= "50"', P + "search.population: found '50'; write a whole number from 10 to 100000"
    ),
    # several at once, in three files
    "everything at once": Case(
        (
            P + "requirement[1].field.source_gap: found 20, which has no unit",
            P + "requirement[1].mask.margin: found '2 dBm'; a level is given in dB",
            P + "stack.max_sheets: found 0",
            P + "stack.first[1]: found 'stel'",
            P + "search.seed: unknown key; did you mean 'random_seed'?",
            S + "materials.copper.density: found 8890, which has no unit",
            S + "materials.steel.origin.saturation: is missing",
            "mask.csv: line 2: found 'x' as frequency_hz",
            "mask.csv: line 3: found 3 columns",
            "ribbon.csv: line 1: found 'f,mu'",
        ),
        problem={
            'source_gap = "20 mm"': "source_gap = 20",
            '"2 dB"': '"2 dBm"',
            STACK: 'max_sheets = 0\nfirst = ["stel"]\n',
            "random_seed": "seed",
        },
        materials={'"8890 kg/m^3"': "8890", 'saturation = "test"\n': ""},
        tables={"mask.csv": "frequency_hz,attenuation_db\nx,1\n1,2,3\n", "sets/ribbon.csv": "f,mu\n"},
    ),
}


@pytest.mark.parametrize("name", CASES)
def test_bad_files_are_refused_with_a_useful_message(
    tmp_path: Path, name: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    case = CASES[name]
    write(tmp_path, case.problem, case.materials, case.tables)
    monkeypatch.chdir(tmp_path)
    with pytest.raises(InputError) as caught:
        read_problem("problem.toml")
    text = str(caught.value)
    for message in case.messages:
        assert message in text, text
    places = [message for message in case.messages if ".toml: " in message or ".csv: " in message]
    assert len(caught.value.findings) == max(1, len(places)), text
    assert all(finding.file for finding in caught.value.findings)


def test_one_bad_line_does_not_flood_the_screen(tmp_path: Path) -> None:
    (tmp_path / "mask.csv").write_text("frequency_hz,attenuation_db\n" + "x,1\n" * 500, encoding="utf-8")
    with pytest.raises(InputError) as caught:
        read_mask_table(tmp_path / "mask.csv")
    assert len(caught.value.findings) == 11
    assert "490 more lines cannot be used either" in str(caught.value)


@pytest.mark.parametrize(
    "read", [read_problem, read_material_set, read_mask_table, read_level_table, read_permeability_table]
)
def test_files_that_are_no_files(tmp_path: Path, read: Any) -> None:
    for path, message in (
        (tmp_path / "none.toml", "does not exist; check the name"),
        (tmp_path, "is a folder; name a file"),
    ):
        with pytest.raises(InputError) as caught:
            read(path)
        assert f"{path}: {message}" in str(caught.value)


def test_huge_files_are_refused_unread(tmp_path: Path) -> None:
    os.truncate(write(tmp_path), 60_000_000)
    with pytest.raises(InputError, match="has 60 MB; files up to 10 MB are read"):
        read_problem(tmp_path / "problem.toml")


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="needs a named pipe")
def test_a_pipe_is_no_file(tmp_path: Path) -> None:
    write(tmp_path)
    (tmp_path / "mask.csv").unlink()
    os.mkfifo(tmp_path / "mask.csv")
    with pytest.raises(InputError, match="is not an ordinary file"):
        read_problem(tmp_path / "problem.toml")


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="the superuser may read everything")
def test_a_file_that_may_not_be_read(tmp_path: Path) -> None:
    write(tmp_path)
    (tmp_path / "mask.csv").chmod(0)
    with pytest.raises(InputError, match="may not be read; check its permissions"):
        read_problem(tmp_path / "problem.toml")


def test_links_in_a_circle(tmp_path: Path) -> None:
    write(tmp_path)
    (tmp_path / "mask.csv").unlink()
    (tmp_path / "mask.csv").symlink_to(tmp_path / "mask.csv")
    with pytest.raises(InputError, match=r"requirement\[2\]\.mask\.file"):
        read_problem(tmp_path / "problem.toml")


STRANGE: list[Any] = [
    None,
    True,
    -1,
    10**400,
    float("nan"),
    "x",
    "5 m",
    [],
    [[]],
    ["x", "x"],
    {"": {}},
    {"law": "sum", "terms": [[1]]},
    {"\0debye": 1, "kind": "\0", "law": {}},
]


def _places(value: Any) -> Iterator[tuple[Any, Any]]:
    children = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    for key, child in children:
        yield value, key
        yield from _places(child)


@pytest.mark.parametrize("strange", STRANGE, ids=lambda value: repr(value)[:20])
def test_no_strange_value_anywhere_escapes_as_another_error(
    tmp_path: Path, strange: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    rules = BOND + 'source_side = [["copper", "1 mm"]]\nfirst = ["copper"]\nmax_cost = 5\n'
    path = write(tmp_path, {STACK: rules, 'use = ["copper", "steel"]': 'use = ["copper"]'})
    files = [problems.parse_toml(file.read_text(encoding="utf-8")) for file in (path, tmp_path / "sets" / "set.toml")]
    monkeypatch.setattr(material_sets, "kramers_kronig_deviation", lambda table: 0.0)  # tested elsewhere, and slow
    for container, key in [place for file in files for place in _places(file)]:
        before, container[key] = container[key], strange
        answers = iter(files)
        monkeypatch.setattr(problems, "parse_toml", lambda text, answers=answers: next(answers))
        with contextlib.suppress(InputError):
            read_problem(path)
        container[key] = before


def test_the_tables_of_these_tests_are_good(tmp_path: Path) -> None:
    write(tmp_path, tables=TABLES)
    assert read_problem(tmp_path / "problem.toml").requirements
