"""Case files: defaults, paths, and a sentence for every fault."""

from dataclasses import fields

import pytest

from ngbound.arc import ErrorModel
from ngbound.case import Case, ErrorsTable, ForcesTable, read_case
from ngbound.errors import CaseError
from ngbound.motion import ForceModel
from ngbound.toml_file import nearest


@pytest.fixture
def write(tmp_path):
    def write_case(text: str, name: str = "my.toml"):
        path = tmp_path / name
        path.write_text(text, encoding="utf-8")
        return path

    return write_case


def fault(path) -> str:
    with pytest.raises(CaseError) as caught:
        read_case(path)
    message = str(caught.value)
    assert "\n" not in message
    assert message.endswith((".", "?", ")"))
    assert str(path) in message
    return message


def test_the_smallest_case_has_a_default_for_everything_else(write, tmp_path):
    case = read_case(write('[arc]\nfile = "a.psv"\n'))
    assert case.arc.file == tmp_path / "a.psv"
    assert case.output.folder == tmp_path / "out" / "my"
    assert case.detection.false_alarm == 0.0027
    assert case.thrust.law == "inverse-square"
    assert case.outgassing == ()
    assert set(case.to_dict()) == set(Case.model_fields)


def test_every_key_is_documented():
    def undocumented(model):
        for name, field in model.model_fields.items():
            inner = [
                part
                for part in (field.annotation, *getattr(field.annotation, "__args__", ()))
                if hasattr(part, "model_fields")
            ]
            if inner:
                assert all(part.__doc__ for part in inner)
                for part in inner:
                    yield from undocumented(part)
            elif not field.description:
                yield f"{model.__name__}.{name}"

    assert list(undocumented(Case)) == []


def test_absolute_paths_are_kept(write, tmp_path):
    elsewhere = tmp_path / "elsewhere" / "a.psv"
    case = read_case(write(f'[arc]\nfile = "{elsewhere}"\n[output]\nfolder = "/results/x"\n'))
    assert case.arc.file == elsewhere
    assert str(case.output.folder) == "/results/x"


def test_a_case_is_frozen(write):
    case = read_case(write('[arc]\nfile = "a.psv"\n'))
    with pytest.raises(ValueError, match="frozen"):
        case.detection.power = 0.5


def test_a_misspelt_key_gets_the_right_one_with_its_line(write):
    message = fault(write('[arc]\nfile = "a.psv"\n\n[detection]\nfalse_alarms = 0.01\n'))
    assert "line 5" in message
    assert "[detection] has no key 'false_alarms'; did you mean 'false_alarm'?" in message


def test_a_misspelt_table_gets_the_right_one_with_its_line(write):
    message = fault(write('[arc]\nfile = "a.psv"\n[detektion]\npower = 0.9\n'))
    assert "line 3: there is no table 'detektion'; did you mean 'detection'?" in message


def test_a_key_in_the_second_of_two_tables_is_found_there(write):
    budget = "[[outgassing]]\nrate = 1e26\nat = 1.2\n"
    message = fault(write(f'[arc]\nfile = "a.psv"\n{budget}{budget}spedd = 800\n'))
    assert "line 9" in message
    assert "did you mean 'speed'?" in message


def test_an_impossible_value_is_told_with_the_allowed_range(write):
    message = fault(write('[arc]\nfile = "a.psv"\n[detection]\npower = 1.7\n'))
    assert message.endswith(
        "line 4: [detection] power = 1.7 is not allowed; it must be a number above 0 and below 1, "
        "or left out for the default 0.95."
    )


def test_not_a_number_is_no_number(write):
    assert "power" in fault(write('[arc]\nfile = "a.psv"\n[detection]\npower = nan\n'))


def test_several_faults_are_all_told(write):
    message = fault(write('[arc]\nfile = "a.psv"\n[detection]\npower = 2\nfalse_alarm = 2\n'))
    assert "1 more" in message
    assert "false_alarm" in message


def test_the_arc_is_compulsory(write):
    message = fault(write("[detection]\npower = 0.9\n"))
    assert "the table [arc] is missing; it must hold at least file" in message


def test_half_an_orbit_is_refused(write):
    message = fault(write('[arc]\nfile = "a"\n[orbit]\nepoch = "2031-01-01"\nq_au = 1.2\n'))
    assert "line 3" in message
    assert "position_au and velocity_au_d" in message


@pytest.mark.parametrize(
    ("content", "word"),
    [
        (b"", "empty"),
        (b"# only a remark\n", "empty"),
        (b"\x89PNG\r\n\x1a\n\x00\xff", "UTF-8"),
        (b"[arc\nfile = 1\n", "line 1"),
        (b'[arc]\nfile = "a"\nfile = "b"\n', "line 3"),
    ],
)
def test_what_is_no_case_file_is_told_in_one_sentence(tmp_path, content, word):
    path = tmp_path / "bad.toml"
    path.write_bytes(content)
    assert word in fault(path)


def test_a_folder_and_a_missing_file_are_told_in_one_sentence(tmp_path):
    assert "directory" in fault(tmp_path)
    assert "No such file" in fault(tmp_path / "absent.toml")


@pytest.mark.parametrize(
    ("law", "meant"), [("water_ice", "water-ice"), ("inverse-sqare", "inverse-square")]
)
def test_an_unknown_law_gets_the_nearest(write, law, meant):
    message = fault(write(f'[arc]\nfile = "a"\n[thrust]\nlaw = "{law}"\n'))
    assert "line 4" in message
    assert meant in message


def test_nearest_lists_what_is_known_when_nothing_is_near():
    assert nearest("zzz", ["alpha", "beta"]) == "known are alpha, beta."


def test_the_error_table_offers_every_choice_of_the_error_model():
    assert ErrorsTable().error_model() == ErrorModel()
    assert set(ErrorsTable.model_fields) == {field.name for field in fields(ErrorModel)}


def test_the_forces_table_has_the_defaults_of_the_force_model():
    assert ForcesTable().force_model() == ForceModel()


def test_a_thrust_window_and_a_table_of_g_reach_the_thrust(write):
    case = read_case(
        write(
            '[arc]\nfile = "a"\n[thrust]\nlaw = "table"\ntable = [[1.0, 1.0], [2.0, 0.2]]\n'
            "window_au = [0.5, 3.0]\n"
        )
    )
    thrust = case.thrust.thrust()
    assert thrust.window.to_dict() == {"by": "distance", "start": 0.5, "end": 3.0}
    assert thrust.g(2.0) == pytest.approx(0.2)


def test_two_windows_at_once_are_refused(write):
    message = fault(
        write(
            '[arc]\nfile = "a"\n[thrust]\nwindow_au = [0.5, 3.0]\n'
            'window_dates = ["2024-01-01", "2024-02-01"]\n'
        )
    )
    assert "not by both" in message


def test_stations_of_the_users_own(write):
    case = read_case(
        write(
            '[arc]\nfile = "a"\n[arc.stations.ZZ1]\n'
            "longitude_deg = 10.0\nlatitude_deg = 50.0\naltitude_m = 300.0\n"
        )
    )
    assert case.own_stations()["ZZ1"]["latitude_deg"] == 50.0


def test_a_bad_outgassing_rate_is_told_where_it_stands(write):
    message = fault(write('[arc]\nfile = "a"\n[[outgassing]]\nrate = "some"\nat = 1.0\n'))
    assert 'line 4: [[outgassing]] rate = "some"' in message


def test_several_species_make_one_budget(write):
    case = read_case(
        write(
            '[arc]\nfile = "a"\n[[outgassing]]\nrate = 1e26\nat = 1.0\n'
            '[[outgassing]]\nspecies = "CO"\nrate = "3 kg/s"\nat = 2.0\nspeed = "0.5 km/s"\n'
        )
    )
    assert [one.species for one in case.budget().emissions] == ["H2O", "CO"]


def test_the_path_of_the_debiasing_table_counts_from_the_folder_of_the_case(write, tmp_path):
    case = read_case(write('[arc]\nfile = "a.psv"\n[errors]\ndebiasing = "bias.dat"\n'))
    assert case.errors.error_model().debiasing == str(tmp_path / "bias.dat")


@pytest.mark.parametrize(
    ("table", "key", "text", "words"),
    [
        ("nucleus", "density", "true", "must be a number"),
        ("nucleus", "density", "-500", "above 0; write for instance density ="),
        ("nucleus", "density", "0", "above 0"),
        ("nucleus", "density", '"800 to 200"', "swap them"),
        ("nucleus", "density", "{low = 800, high = 200}", "swap them"),
        ("nucleus", "density", "0.5", "1 to 25000 kg/m3"),
        ("nucleus", "density", '"< 500"', "only an upper limit"),
        ("nucleus", "density", '"500 km"', "allowed: kg/m3, g/cm3"),
        ("nucleus", "density", "nan", "must be a number"),
        ("nucleus", "diameter", "0", "above 0"),
        ("nucleus", "diameter", '"2 kg"', "allowed: m, km"),
        ("nucleus", "H", "false", "must be a number"),
        ("nucleus", "H", "[17, 18]", "must be a number"),
        ("nucleus", "H", "99", "between -5 and 45"),
        ("nucleus", "H", '"17.4 +- -0.2"', "cannot be read"),
        ("nucleus", "radiation_coefficient", "3", "2"),
        ("nucleus", "coma", '"yes"', "true or false"),
        ("nucleus", "albido", "0.04", "did you mean 'albedo'?"),
        ("reach", "diameter", "-2", "above 0"),
        ("reach", "species", '["CO3"]', "Did you mean 'CO'?"),
        ("reach", "at", "0", "above 0"),
        ("reach", "diametre", "1", "did you mean 'diameter'?"),
    ],
)
def test_what_is_assumed_about_the_body_is_tried_when_the_case_is_read(
    write, table, key, text, words
):
    message = fault(write(f'[arc]\nfile = "a"\n[{table}]\n{key} = {text}\n'))
    assert f"line 4: [{table}] " in message
    assert key in message and words in message


@pytest.mark.parametrize(
    "albedo", ["-0.04", "4", '"0.06 to 0.02"', "true", "{value = 0.04, sgma = 1}"]
)
def test_an_albedo_out_of_its_range_is_told_where_it_stands(write, albedo):
    message = fault(write(f'[arc]\nfile = "a"\n[nucleus]\nH = 18\nalbedo = {albedo}\n'))
    assert "line 5: [nucleus] albedo" in message


def test_an_albedo_without_a_magnitude_is_told(write):
    assert "without H" in fault(write('[arc]\nfile = "a"\n[nucleus]\nalbedo = 0.04\n'))


@pytest.mark.parametrize(
    ("key", "text", "words"),
    [
        ("rate", "true", "must be a number"),
        ("rate", "-1e26", "above 0; write for instance rate ="),
        ("rate", '"3e26 to 1e26"', "swap them"),
        ("rate", '"5 furlong"', "allowed: molecules/s"),
        ("at", '"1 to 2"', "one heliocentric distance"),
        ("at", "0", "above 0"),
        ("speed", "-1", "above 0"),
        ("speed", "800", '"800 m/s" or 0.8'),
        ("speed", '"delsem"', "Did you mean 'delsemme'?"),
        ("collimation", "1.4", "between 0 and 1"),
        ("species", '"H20"', "Did you mean 'H2O'?"),
        ("species", '"h2o"', "Did you mean 'H2O'?"),
        ("species", '"water"', "Did you mean 'H2O'?"),
        ("colimation", "0.5", "did you mean 'collimation'?"),
    ],
)
def test_a_fault_in_the_budget_is_told_by_its_key(write, key, text, words):
    keys = {"rate": "1e26", "at": "1.2", key: text}
    lines = "".join(f"{name} = {value}\n" for name, value in keys.items())
    message = fault(write(f'[arc]\nfile = "a"\n[[outgassing]]\n{lines}'))
    line = 4 + list(keys).index(key)
    assert f"line {line}: [[outgassing]] " in message
    assert key in message and words in message


def test_the_size_of_the_nucleus_comes_from_its_diameter_or_its_brightness(write):
    def size(text):
        return read_case(write(f'[arc]\nfile = "a"\n[nucleus]\n{text}\n')).nucleus.size()

    assert size("coma = false") is None
    assert size("H = 17.4\nalbedo = 0.04").name == "photometric diameter"
    assert size('H = 17.4\ndiameter = "2 km"').distribution.median == 2000.0


def test_a_limit_on_the_rate_is_a_rate(write):
    case = read_case(write('[arc]\nfile = "a"\n[[outgassing]]\nrate = "< 3e25"\nat = 1.2\n'))
    assert str(case.budget().emissions[0].rate) == "< 3e25"
