from dataclasses import fields

import pytest

from flows.settings import Settings, SettingsError, load, result_settings, template


@pytest.fixture
def programme_toml(tmp_path):
    def write(text):
        path = tmp_path / "programme.toml"
        path.write_text(text, encoding="utf-8")
        return path

    return write


def test_the_template_is_the_defaults(programme_toml):
    """The file that init writes loads as the default settings, but for name and zone."""
    settings = load(programme_toml(template('Coast "north"', "Europe/Lisbon")))
    assert settings.programme.name == 'Coast "north"'
    assert settings.programme.zone == "Europe/Lisbon"
    for section in fields(Settings):
        if section.name != "programme":
            assert getattr(settings, section.name) == getattr(Settings(), section.name)


def test_the_template_explains_every_setting():
    """Each setting stands in the template with its meaning beside it."""
    text = template("x", "UTC")
    for section in fields(Settings):
        for setting in fields(section.default_factory):
            assert f"{setting.name} = " in text
            assert setting.metadata["meaning"] in text


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ("[wear]\nmin_analysable_hours = 3\n", "did you mean min_analysable_h_per_day?"),
        ("[detectors]\n", "did you mean detector?"),
        ("[detector]\npause_ms = 20\n", "expected 1000 to 10000"),
        ("[detector]\npause_ms = true\n", "expected a value like 2000"),
        ("[detector]\npause_ms = '2000'\n", "expected a value like 2000"),
        ("[programme]\nzone = 'Lisbon'\n", "expected an IANA time zone"),
        ("[programme]\nzone = '../../etc/passwd'\n", "expected an IANA time zone"),
        ("[inbox]\naccepted_files = 'burn'\n", "expected leave or remove"),
        ("wear = 3\n", "expected a section [wear]"),
        ("[wear\n", "not readable as TOML"),
    ],
)
def test_a_wrong_setting_is_refused_with_what_is_expected(programme_toml, text, told):
    """A wrong file is refused with the file, what was found and what is expected."""
    path = programme_toml(text)
    with pytest.raises(SettingsError) as refusal:
        load(path)
    assert str(path) in str(refusal.value)
    assert told in str(refusal.value)


def test_a_folder_without_settings_is_no_programme(tmp_path):
    """A folder without programme.toml is refused with the command that makes one."""
    with pytest.raises(SettingsError, match="burdenline init"):
        load(tmp_path / "programme.toml")


def test_execution_settings_stay_out_of_the_fingerprint(programme_toml):
    """Workers and inbox settings change no result, detector settings do."""
    before = result_settings(Settings())
    assert result_settings(load(programme_toml("[workers]\nprocesses = 2\n[inbox]\nquiet_s = 5\n"))) == before
    assert result_settings(load(programme_toml("[detector]\npause_ms = 2500\n"))) != before
