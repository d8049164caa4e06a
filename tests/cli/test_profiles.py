"""``morph profiles``: the list, one profile with its sources, JSON, a file, and what is refused."""

import json
from importlib import resources

import pytest

from morph.cli.main import main
from morph.settings.profile import profile_names

pytestmark = pytest.mark.quick


def test_the_list_names_every_profile_with_its_key_numbers(capsys):
    assert main(["profiles"]) == 0
    lines = capsys.readouterr().out.splitlines()
    rows = {line.split()[0]: line for line in lines[1:-2]}
    assert tuple(rows) == profile_names()
    assert "40 um  45 deg  6 mm" in rows["steel-40um"] and "250 x 250 x 300 mm" in rows["steel-40um"]
    assert "258 to 330 W/mK" in rows["copper-40um"] and "CuCrZr" in rows["copper-40um"]
    assert len({line.index("mm") for line in rows.values() if line}) == 1  # in columns


@pytest.mark.parametrize("name", profile_names())
def test_one_profile_shows_every_number_with_its_source(name, capsys):
    assert main(["profiles", name]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert lines[0].startswith(f"{name}: ") and len(lines) == 1 + 17
    text = (resources.files("morph.settings") / "profiles" / f"{name}.toml").read_text()
    sources = [line.split(" = ", 1)[1].strip('"') for line in text.splitlines() if line.startswith("source")]
    assert sorted(sources) == sorted(
        source for source, line in ((s, at) for at in lines[1:] for s in set(sources) if at.endswith(f"  {s}"))
    )


def test_json_holds_value_unit_and_source(capsys):
    assert main(["profiles", "--json"]) == 0
    table = json.loads(capsys.readouterr().out)
    assert tuple(table) == profile_names()
    assert main(["profiles", "aluminium-30um", "--json"]) == 0
    one = json.loads(capsys.readouterr().out)
    assert one == {"aluminium-30um": table["aluminium-30um"]}
    conducts = one["aluminium-30um"]["conductivity_as_printed_w_mk"]
    assert (conducts["low"], conducts["high"], conducts["unit"]) == (117.0, 136.0, "W/mK") and conducts["source"]
    assert [side["value"] for side in one["aluminium-30um"]["machine_mm"]] == [250.0, 250.0, 300.0]


def test_an_unknown_name_is_told_the_nearest(capsys):
    assert main(["profiles", "steel-40", "--json"]) == 1
    said = capsys.readouterr()
    assert "[profile-unknown]" in said.err and "steel-40um" in said.err
    assert json.loads(said.out)["error"]["code"] == "profile-unknown"


def test_a_file_of_the_user_and_a_file_as_result(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    text = (resources.files("morph.settings") / "profiles" / "steel-40um.toml").read_text()
    (tmp_path / "own.toml").write_text(text.replace('name = "steel-40um"', 'name = "own"'))
    assert main(["profiles", "own.toml", "--out", "own.txt"]) == 0
    assert capsys.readouterr().out == "" and (tmp_path / "own.txt").read_text().startswith("own: ")
    assert main(["profiles", "own.toml", "--out", "own.txt"]) == 1
    assert main(["profiles", "own.toml", "--out", "own.txt", "--force"]) == 0
