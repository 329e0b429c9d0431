"""The case file: what it may say, and one clear line for everything else."""

import json
import math

import pytest

from daraf.bem.errors import InputError
from daraf.io.case import load_case, make_case
from daraf.io.schema import json_schema

GOOD = """\
title = "Probe head"
unit = "mm"
accuracy = "0.5 %"

[medium]
relative_permittivity = 2.2

[[conductor]]
name = "drive"
surface = "probe.stl"
body = "drive"
potential = "5 kV"
rotation = { angle = "30 deg", axis = "z", about = "0, 0, 2 mm" }
shift = ["1 mm", 0, "-2 mm"]

[[conductor]]
name = "guard"
charge = 0
[[conductor.part]]
surface = "guard.stl"
body = ["ring", 2]
[[conductor.part]]
surface = "guard.stl"
unit = "inch"
shift = "0 0 -2.5e-1mm"
"""


@pytest.fixture
def load(tmp_path):
    def load_text(text):
        file = tmp_path / "probe.toml"
        file.write_text(text, encoding="utf-8")
        return load_case(file)

    return load_text


def test_a_good_case_in_si(load, tmp_path):
    case = load(GOOD)
    content = case.content
    assert (case.folder, content.title, content.unit, content.accuracy) == (
        tmp_path,
        "Probe head",
        "mm",
        0.005,
    )
    assert content.medium.relative_permittivity == 2.2
    drive, guard = content.conductor
    assert (drive.potential, drive.charge, drive.ground) == (5000.0, None, False)
    assert drive.rotation.angle == pytest.approx(math.pi / 6)
    assert drive.rotation.axis == (0.0, 0.0, 1.0)
    assert drive.rotation.about == (0.0, 0.0, 0.002)
    assert drive.shift == (0.001, 0.0, -0.002)
    assert [part.body for part in drive.parts] == [("drive",)]
    assert guard.charge == 0.0
    assert guard.stated == ["charge"]
    assert [part.body for part in guard.parts] == [("ring", 2), ()]
    assert guard.parts[1].unit == "in"
    assert guard.parts[1].shift[2] == pytest.approx(-0.25e-3)
    assert content.excited
    json.dumps(case.stated)


def test_nothing_stated_means_capacitances_only(load):
    text = GOOD.replace('potential = "5 kV"\n', "").replace("charge = 0\n", "")
    assert not load(text).content.excited


# What is put in place of what, and words that the one line must hold.
BAD = [
    ("unit =", "unti =", "unknown key 'unti'; did you mean 'unit'?"),
    ("potential =", "potental =", "conductor 1 'drive': unknown key 'potental'; did you mean 'potential'?"),
    ("angle =", "angel =", "rotation: unknown key 'angel'; did you mean 'angle'?"),
    ("relative_permittivity", "permittivity", "did you mean 'relative_permittivity'?"),
    ('"5 kV"', '"5 mm"', "conductor 1 'drive', potential: '5 mm' is no voltage"),
    ("charge = 0", "charge = 0\nground = true", "charge and ground are both given"),
    ('"5 kV"', '"5 kV"\ncharge = "1 nC"', "potential and charge are both given"),
    ("charge = 0\n", "", "conductor 'guard' states no potential, charge or ground"),
    ('"guard"', '"drive"', "two conductors are named 'drive'"),
    ('"guard"', '""', "is no name"),
    ('surface = "probe.stl"\n', "", "'surface' is missing"),
    ("charge = 0", 'charge = 0\nsurface = "x.stl"', "surface given beside 'part'"),
    ('"0, 0, 2 mm"', "[0, 0]", "is no place or shift"),
    ('"0, 0, 2 mm"', '"0 0 2"', "is no place or shift"),
    ('axis = "z"', "axis = [0, 0, 0]", "must be finite and not zero"),
    ('axis = "z"', 'axis = "up"', "is no axis"),
    ('"0.5 %"', "1", "accuracy 1 is outside"),
    ('"0.5 %"', '"0 %"', "is outside"),
    ("= 2.2", "= 0.5", "greater than or equal to 1"),
    ("= 2.2", '= "high"', "does not fit"),
    ("[medium]", "[dielectric]", "does not solve dielectric bodies"),
    ("[medium]", "[[mirror]]", "does not solve mirror planes"),
    ("[medium]", "[[given_charge]]", "does not solve given charges"),
    ("[medium]", "[external_field]", "does not solve an external field"),
    ("[medium]", "[[probe]]", "does not solve probes"),
    ("[medium]", "[[variation]]", "does not solve variations"),
    ("relative_permittivity", "loss_tangent", "does not solve losses"),
    ('unit = "mm"', 'unit = "mmm"', "did you mean 'mm'"),
    ('unit = "mm"', 'facets = "no"', "does not say what facets are"),
    ('unit = "mm"', "unit = 3", "is no unit"),
    ('unit = "mm"', "unit =", "no valid TOML: Invalid value (at line 2"),
    ('["ring", 2]', "[]", "chooses no body"),
    ('["ring", 2]', "1.5", "chooses no body"),
    ("[[conductor.part]]", "[conductor.part]", "no valid TOML"),
]


@pytest.mark.parametrize(("old", "new", "words"), BAD, ids=[f"{row[1][:24]}-{k}" for k, row in enumerate(BAD)])
def test_bad_case_gives_one_line(load, old, new, words):
    assert old in GOOD
    with pytest.raises(InputError) as caught:
        load(GOOD.replace(old, new, 1))
    message = str(caught.value)
    assert words in message
    assert "probe.toml: " in message
    assert "\n" not in message


@pytest.mark.parametrize("text", ['unit = "mm"', 'unit = "mm"\nconductor = []'])
def test_no_conductor(load, text):
    with pytest.raises(InputError, match="no conductor; add at least one"):
        load(text)


def test_single_brackets(load):
    with pytest.raises(InputError, match=r"write \[\[conductor\]\] in double brackets"):
        load('[conductor]\nname = "a"\nsurface = "b.stl"')


def test_files_that_are_no_case(tmp_path):
    with pytest.raises(InputError, match="no such file"):
        load_case(tmp_path / "none.toml")
    with pytest.raises(InputError, match="is a folder"):
        load_case(tmp_path)
    empty = tmp_path / "empty.toml"
    empty.write_text("\n")
    with pytest.raises(InputError, match="empty"):
        load_case(empty)
    empty.write_bytes(b"\xff\xfe\x00title")
    with pytest.raises(InputError, match="no UTF-8 text"):
        load_case(empty)


def test_make_case_in_python():
    case = make_case({"unit": "mm", "conductor": [{"name": "ball", "surface": "ball.stl"}]}, folder=".")
    assert case.content.accuracy == 0.01
    assert case.label == "case"


def test_json_schema_names_every_key():
    schema = json_schema()
    text = json.dumps(schema)
    assert schema["$schema"].endswith("2020-12/schema")
    assert schema["additionalProperties"] is False
    known = {"title", "unit", "facet_tolerance", "accuracy", "facets", "method", "want", "sensitivities", "medium"}
    known |= {"air", "conductor", "mend", "mend_within", "close_holes", "coarsen"}
    assert set(schema["properties"]) == known
    for key in ("potential", "charge", "ground", "rotation", "shift", "about", "relative_permittivity"):
        assert f'"{key}"' in text


def test_wanted_couplings_name_conductors(load):
    plain = """unit = "mm"
want = [["a", "b"], ["a", "a"]]
[[conductor]]
name = "a"
surface = "a.stl"
[[conductor]]
name = "b"
surface = "b.stl"
"""
    assert load(plain).content.want == (("a", "b"), ("a", "a"))
    with pytest.raises(InputError, match="want: no conductor is named 'c'; there are 'a', 'b'"):
        load(plain.replace('["a", "b"]', '["a", "c"]'))
