import itertools
import re
import tomllib
from pathlib import Path

import pytest
from pydantic import BaseModel

from ramulus import UnusableInputError
from ramulus.config import (
    Configuration,
    ReportSettings,
    as_toml,
    load_configuration,
    preset_names,
    preset_path,
)

ROOT = Path(__file__).parents[1]


def refusal(*files, changes=()):
    with pytest.raises(UnusableInputError) as caught:
        load_configuration(*files, changes=changes)
    words = str(caught.value)
    assert "\n" not in words
    assert len(words) < 600
    return words


def written(folder, text, name="settings.toml"):
    path = folder / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


@pytest.mark.parametrize("explain", [False, True])
def test_the_printed_configuration_reads_back_as_it_was(tmp_path, explain):
    text = as_toml(Configuration(), explain=explain)
    assert load_configuration(written(tmp_path, text)) == Configuration()


def test_values_of_every_kind_read_back_as_they_were(tmp_path):
    changes = [
        'report.title="Täube \\"7\\" \\\\ \\u007f"', "input.spacing_um=[2, 0.5, 1e-3]",
        "root.inlet=position", "root.inlet_um=[[1, 2, 3], [4, 5, 6.5]]", "run.workers=3",
        "gauge.recentre=false", 'cohort.primary_figures=["junction_exponent"]',
    ]  # fmt: skip
    changed = load_configuration(changes=changes)
    assert load_configuration(written(tmp_path, as_toml(changed))) == changed
    assert changed.input.spacing_um == (2.0, 0.5, 0.001)
    assert changed.report.title == 'Täube "7" \\ \x7f'
    assert changed.root.inlet_um == ((1.0, 2.0, 3.0), (4.0, 5.0, 6.5))


def test_every_key_is_explained():
    unexplained = [key for key, field in fields(Configuration, "") if not field.description]
    assert unexplained == []
    lines = as_toml(Configuration(), explain=True).splitlines()
    for before, line in itertools.pairwise(lines):
        if re.match(r"(# )?\w+ = ", line):
            assert before.startswith("#"), line


def fields(model, before):
    for name, field in model.model_fields.items():
        yield before + name, field
        if isinstance(field.annotation, type) and issubclass(field.annotation, BaseModel):
            yield from fields(field.annotation, f"{before}{name}.")


def test_an_explanation_names_unit_choices_limits_and_source():
    text = as_toml(Configuration().viscosity, explain=True).replace("\n#   ", " ")
    assert "viscosity of plasma, which the laws are relative to [mPa s]; > 0 (source: Open" in text
    assert "one of: constant, pries_1992, pries_1994" in text
    assert as_toml(ReportSettings(level="none")) == 'level = "none"\ntitle = ""'


def test_a_bare_word_is_text_and_nothing_is_the_default():
    assert load_configuration(changes=["input.polarity=dark"]).input.polarity == "dark"
    assert load_configuration(changes=["input.channel=1"]).input.channel == "1"
    assert load_configuration(changes=["report.title=2026"]).report.title == "2026"
    taken_back = ["enhance.radius_max_um=3", "enhance.radius_max_um="]
    assert load_configuration(changes=taken_back) == Configuration()


def test_later_files_and_changes_win_key_by_key(tmp_path):
    one = written(tmp_path, "[clean]\nbridge_radii = 1\npart_length_share = 0.5\n", "one.toml")
    two = written(tmp_path, "[clean]\nbridge_radii = 2\n", "two.toml")
    clean = load_configuration(one, two, changes=["clean.bridge_angle_deg=30"]).clean
    assert (clean.bridge_radii, clean.part_length_share, clean.bridge_angle_deg) == (2.0, 0.5, 30.0)


def test_paths_in_a_file_are_relative_to_it(tmp_path):
    (tmp_path / "deep").mkdir()
    toml = '[input]\nstack = "../a.tif"\nregion = "/elsewhere/b.tif"\n'
    path = written(tmp_path / "deep", toml)
    found = load_configuration(path).input
    assert Path(found.stack).resolve() == tmp_path / "a.tif"
    assert found.region == "/elsewhere/b.tif"
    assert load_configuration(changes=["input.region=b.tif"]).input.region == "b.tif"


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ("gauge.recenter=true", "unknown key 'gauge.recenter'; did you mean 'gauge.recentre'?"),
        ("enhanc.filter=sato", "unknown key 'enhanc'; did you mean 'enhance'?"),
        ("gauge.radius_max_um=2", "did you mean 'enhance.radius_max_um'?"),
        ("phantom.tree.exponnt=1", "did you mean 'phantom.tree.exponent'?"),
        ("gauge.zzzz=1", "known here: gauge.blur_sigma_um"),
        ("zzzz.zzzz=1", "known here: background, enhance"),
        ("gauge.recentre=1", "gauge.recentre: found 1, expected true or false"),
        ("enhance.radius_max_um=-1", "enhance.radius_max_um: found -1, expected greater than 0"),
        ('enhance.radius_max_um="12"', 'enhance.radius_max_um: found "12", expected a number'),
        ("run.workers=1.5", "run.workers: found 1.5, expected a whole number"),
        ("input.kind=photo", "input.kind: found \"photo\", expected 'auto', 'stack'"),
        ("input.spacing_um=[1, 2]", "input.spacing_um: found [1, 2], expected more values"),
        ("input.spacing_um=[1, 2, nan]", "input.spacing_um.2: found NaN, expected a finite"),
        ("enhance.noise_factor=inf", "found Infinity, expected a finite number"),
        ("gauge.recentre.x=1", "gauge.recentre: found"),
        ("enhance.radius_max_um=2020-01-01", "found the date 2020-01-01"),
        ("foo", "found 'foo', expected section.key=value"),
        ("run=1", "found 'run=1', expected section.key=value"),
        ("=1", "expected section.key=value"),
        ("input..x=1", "expected section.key=value"),
        ("input.kind=" + "[" * 5000, "input.kind: found"),
    ],
)
def test_a_change_that_does_not_fit_is_refused_in_one_line(change, words):
    refused = refusal(changes=[change])
    assert refused.startswith("--set: ")
    assert words in refused


def test_a_change_through_a_value_is_refused():
    assert "leads through a value" in refusal(changes=["gauge.recentre=true", "gauge.recentre.x=1"])


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("[gauge\n", "not valid TOML (Expected ']'"),
        ("[gauge]\nrecenter = true\n", "unknown key 'gauge.recenter'; did you mean"),
        ("[gauge]\nrecentre = 'yes'\n", 'gauge.recentre: found "yes", expected true or false'),
        ("gauge = 3\n", "gauge: found 3"),
        ("input = [1]\n", "input: found [1]"),
        ("[input]\nstack = 3\n", "input.stack: found 3, expected text"),
        ("[input]\nchannel = 1\n", "input.channel: found 1, expected text"),
        (b'[report]\ntitle = "\xff"\n', "is not UTF-8"),
        ("a = " + "[" * 100_000, "not valid TOML"),
        ("a = 1\n" * 400_000, "expected settings of at most"),
        ("a = 1" + "0" * 10_000, "settings.toml: "),
        ("[thin]\na = 1\nb = 1\n[gauge]\nc = 1\nd = 1\ne = 1\nf = 1\n", "; and 1 more"),
    ],
)  # fmt: skip
def test_a_file_that_does_not_fit_is_refused_in_one_line(tmp_path, text, words):
    refused = refusal(written(tmp_path, text))
    assert refused.startswith("settings.toml: ")
    assert words in refused


def test_a_file_that_cannot_be_read_is_named(tmp_path):
    assert "absent.toml: cannot be read (no such file" in refusal(tmp_path / "absent.toml")
    assert "cannot be read (is a directory)" in refusal(tmp_path)


def test_a_file_saved_with_a_byte_order_mark_reads(tmp_path):
    path = written(tmp_path, b"\xef\xbb\xbf[clean]\nbridge_radii = 2\n")
    assert load_configuration(path).clean.bridge_radii == 2.0


def test_the_shipped_presets_refine_the_defaults_and_comment_each_key():
    assert preset_names() == ["confocal", "demo", "micro_ct", "mr_angiography", "two_photon"]
    for name in preset_names():
        path = preset_path(name)
        assert load_configuration(path) != Configuration()
        lines = path.read_text(encoding="utf-8").splitlines()
        assert lines[0].startswith("# ")
        for before, line in itertools.pairwise(lines):
            if " = " in line and not line.startswith("#"):
                assert before.startswith("# "), f"{name}: {line}"


def test_presets_say_only_what_differs():
    default = Configuration().model_dump(mode="json")
    for name in preset_names():
        tree = tomllib.loads(preset_path(name).read_text(encoding="utf-8"))
        for section, keys in tree.items():
            same = [key for key, value in keys.items() if default[section][key] == value]
            assert same == [], f"{name}: {section}.{same}"


def test_an_unknown_preset_is_refused_with_the_nearest():
    with pytest.raises(UnusableInputError, match="did you mean 'confocal'"):
        preset_path("confocl")
    with pytest.raises(UnusableInputError, match="expected one of confocal, demo"):
        preset_path("../configs/demo")


def test_the_installed_package_holds_the_presets():
    build = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    wheel = build["tool"]["hatch"]["build"]["targets"]["wheel"]
    assert wheel["force-include"] == {"configs": "ramulus/presets"}


def test_the_stages_settings_come_apart_from_the_rest():
    changed = load_configuration(changes=["clean.bridge_radii=2", "report.level=none"])
    assert changed.line().clean.bridge_radii == 2.0
    assert not hasattr(changed.line(), "report")
