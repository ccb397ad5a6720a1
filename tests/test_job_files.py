"""Job files: what is read, what is filled in, and how bad input is refused."""

from __future__ import annotations

import re
import tomllib
from math import pi
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import tomli_w
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from lattice.errors import InputError
from lattice.job.choices import PRECONDITIONERS, START_KINDS
from lattice.job.overrides import lay_over, read_override
from lattice.job.problems import JobErrors
from lattice.job.ranks import check_ranks
from lattice.job.reader import load_job, load_job_with_cautions
from lattice.job.reference import job_reference
from lattice.job.resolution import resolution_cautions
from lattice.job.schema import CoarseSection, Job, PatchesSection
from lattice.job.starts import START_MODELS
from lattice.job.unknowns import scalar_names
from lattice.job.writer import job_to_toml
from lattice.laws.law import Parameter
from lattice.solve.registry import NAMES
from lattice.starts import STARTS

ROOT = Path(__file__).resolve().parents[1]

FILM = {
    "law": {"name": "kuramoto-sivashinsky"},
    "box": {"period": 20.0, "length_x": 22.0},
    "lattice": {"nt": 40, "nx": 48},
    "start": {"kind": "march", "seed": 3},
}
FILM_2D = {
    "law": {"name": "film-2d"},
    "box": {"period": 10.0, "length_x": 16.0, "length_y": 16.0},
    "lattice": {"nt": 20, "nx": 32, "ny": 32},
    "start": {"kind": "march"},
}
SHEAR = {
    "law": {"name": "kolmogorov"},
    "box": {"period": 5.0, "length_x": 2 * pi, "length_y": 2 * pi},
    "lattice": {"nt": 20, "nx": 32, "ny": 32},
    "start": {"kind": "march"},
}
WAVES = {
    "law": {"name": "ginzburg-landau"},
    "box": {"period": 5.0, "length_x": 20.0},
    "lattice": {"nt": 20, "nx": 32},
    "start": {"kind": "waves", "modes": [{"component": "u", "amplitude": 0.5, "kx": 1, "kt": 1}]},
}
OWN = {
    "law": {"equations": ["u_t + u*u_x = nu*u_xx + force*sin(x)"], "parameters": {"nu": 0.1, "force": 1.0}},
    "box": {"period": 5.0, "length_x": 2 * pi},
    "lattice": {"nt": 20, "nx": 32},
    "start": {"kind": "march"},
}
BASES = {"film": FILM, "film-2d": FILM_2D, "shear": SHEAR, "waves": WAVES, "own": OWN}
BASE_NAMES = list(BASES)

JARGON = re.compile(
    r"pydantic|Input should|Field required|validation error|https?:|type=|Traceback", re.IGNORECASE
)


def written(folder: Path, base: dict[str, Any], name: str = "job.toml") -> Path:
    path = folder / name
    path.write_text(tomli_w.dumps(base), encoding="utf-8")
    return path


def refusal(folder: Path, base: dict[str, Any], *overrides: str) -> str:
    with pytest.raises(InputError) as caught:
        load_job(written(folder, base), overrides)
    message = str(caught.value)
    assert not JARGON.search(message)
    assert message.strip()
    return message


REFUSED = tomllib.loads(Path(__file__).with_name("refused_jobs.toml").read_text(encoding="utf-8"))["refused"]


@pytest.mark.parametrize(
    "case", REFUSED, ids=[f"{case['job']}:{' '.join(case['set'])}"[:60] for case in REFUSED]
)
def test_bad_input_is_refused_with_key_requirement_and_remedy(tmp_path: Path, case: dict[str, Any]) -> None:
    message = refusal(tmp_path, BASES[case["job"]], *case["set"])
    for part in case["says"]:
        assert part in message, message


@pytest.mark.parametrize("base", BASE_NAMES)
def test_the_jobs_that_the_bad_ones_are_made_from_are_good(tmp_path: Path, base: str) -> None:
    job = load_job(written(tmp_path, BASES[base]))
    assert set(job.make_values()) == set(scalar_names(job.make_law()))


@pytest.mark.parametrize(
    ("section", "said"),
    [
        ("law", "law: is required; add a table [law]"),
        ("lattice", "lattice: is required; add a table [lattice]"),
        ("start", "start: is required; add a table [start]"),
        ("box", "box.length_x: is required; add length_x = ... to [box]"),
    ],
)
def test_a_missing_section_is_named(tmp_path: Path, section: str, said: str) -> None:
    base = {name: table for name, table in FILM.items() if name != section}
    assert said in refusal(tmp_path, base)


@pytest.mark.parametrize(
    ("base", "section", "key"),
    [
        ("film", "box", "period"),
        ("film", "box", "length_x"),
        ("film", "lattice", "nx"),
        ("film", "lattice", "nt"),
        ("film-2d", "lattice", "ny"),
        ("film-2d", "box", "length_y"),
    ],
)
def test_a_missing_key_is_named(tmp_path: Path, base: str, section: str, key: str) -> None:
    job = {name: dict(table) for name, table in BASES[base].items()}
    del job[section][key]
    assert f"{section}.{key}: is required" in refusal(tmp_path, job)


def test_problems_are_told_together_one_per_line_with_the_file(tmp_path: Path) -> None:
    path = written(tmp_path, FILM)
    with pytest.raises(JobErrors) as caught:
        load_job(path, ["lattice.nx=1.5", "box.period=-1", "solve.fre=1"])
    lines = str(caught.value).splitlines()
    assert len(lines) == len(caught.value.problems) == 3
    assert all(line.startswith(f"{path} with --set: ") for line in lines)
    assert [problem.key for problem in caught.value.problems] == ["box.period", "lattice.nx", "solve.fre"]


def test_a_problem_of_the_file_is_not_blamed_on_the_command_line(tmp_path: Path) -> None:
    path = written(tmp_path, {**FILM, "lattice": {"nt": 40, "nx": 4}})
    with pytest.raises(InputError) as caught:
        load_job(path, ["lattice.nt=4"])
    first, second = str(caught.value).splitlines()
    assert first.startswith(f"{path} with --set: lattice.nt: must be >= 8 or 1 (no time axis) for order 4")
    assert second.startswith(f"{path}: lattice.nx: must be >= 8 for order 4, got nx = 4")


@pytest.mark.parametrize(
    ("content", "said"),
    [
        (b"[law\nname=3", "is not valid TOML"),
        (b"[law]\nname = 'a'\nname = 'b'", "is not valid TOML"),
        (b"", "law: is required"),
        (b"\xff\xfe[law]", "must be text in UTF-8"),
        (b"\x00\x01\x02", "is not valid TOML"),
        (b"\x89HDF\r\n\x1a\n", "must be text in UTF-8"),
    ],
)
def test_a_file_that_is_no_job_is_refused(tmp_path: Path, content: bytes, said: str) -> None:
    path = tmp_path / "job.toml"
    path.write_bytes(content)
    with pytest.raises(InputError, match=re.escape(said)) as caught:
        load_job(path)
    assert str(path) in str(caught.value)


# Values of every kind that TOML has, some of them hostile, put at every key.
VALUES = st.recursive(
    st.one_of(
        st.booleans(),
        st.integers(-(2**63), 2**63 - 1),
        st.floats(),
        st.text(max_size=12),
        st.sampled_from(["__import__('os')", "{{7*7}}", "../../etc/passwd", "'; rm -rf /", "%s", "\x1b[31m"]),
        st.dates(),
    ),
    lambda inner: st.one_of(
        st.lists(inner, max_size=3), st.dictionaries(st.text(min_size=1, max_size=6), inner, max_size=3)
    ),
    max_leaves=5,
)
KEYS = [
    (section, key)
    for section, field in Job.model_fields.items()
    if section != "start"
    for key in field.annotation.model_fields  # type: ignore[union-attr]
] + [("start", key) for key in {key for model in START_MODELS.values() for key in model.model_fields}]


@given(st.sampled_from(sorted(KEYS)), st.text(st.characters(categories=["Cc", "Cf", "L"]), min_size=1))
@settings(max_examples=100, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_no_refusal_steers_the_terminal(tmp_path: Path, place: tuple[str, str], text: str) -> None:
    section, key = place
    tables = {name: dict(table) for name, table in FILM.items()}
    tables.setdefault(section, {})[key] = text
    tables.setdefault(section, {})[text + "?"] = 1
    with pytest.raises(InputError) as caught:
        load_job(written(tmp_path, tables))
    assert all(letter.isprintable() or letter == "\n" for letter in str(caught.value))


def test_a_missing_file_and_a_folder_are_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="no such job file"):
        load_job(tmp_path / "none.toml")
    with pytest.raises(InputError, match="is a folder"):
        load_job(tmp_path)


@given(st.sampled_from(BASE_NAMES), st.sampled_from(sorted(KEYS)), VALUES)
@settings(max_examples=300, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_any_value_at_any_key_gives_a_job_or_a_readable_refusal(
    tmp_path: Path, base: str, place: tuple[str, str], value: Any
) -> None:
    section, key = place
    tables = {name: dict(table) for name, table in BASES[base].items()}
    tables.setdefault(section, {})[key] = value
    try:
        job = load_job(written(tmp_path, tables))
    except InputError as error:
        assert not JARGON.search(str(error).replace(str(value), ""))
        assert f"{section}" in str(error)
    else:
        assert isinstance(job, Job)


@given(st.text(max_size=40))
@settings(max_examples=300, deadline=None)
def test_any_override_is_read_or_refused(text: str) -> None:
    try:
        path, _ = read_override(text)
    except InputError as error:
        assert "section.key=value" in str(error)
    else:
        assert all(path)


@given(
    st.one_of(
        st.integers(-(2**63), 2**63 - 1), st.booleans(), st.floats(allow_nan=False), st.text(max_size=20)
    ),
)
def test_an_override_written_as_toml_comes_back(value: Any) -> None:
    text = tomli_w.dumps({"value": value}).removeprefix("value = ").rstrip("\n")
    tables, keys = lay_over({"a": {"b": None}}, [f"a.b={text}"])
    assert tables == {"a": {"b": value}}
    assert keys == ("a.b",)


def test_an_override_cannot_smuggle_in_other_keys(tmp_path: Path) -> None:
    path, value = read_override("law.name=1\n[output]\nfolder='/'")
    assert path == ("law", "name")
    assert value == "1\n[output]\nfolder='/'"
    assert "law.name: must be a shipped law" in refusal(tmp_path, FILM, "law.name=1\n[output]\nfolder='/'")


def test_overrides_replace_values_and_leave_the_rest(tmp_path: Path) -> None:
    path = written(tmp_path, FILM)
    job = load_job(path, ["lattice.nx=64", "law.parameters.dispersion=0.5", "output.folder=runs/else"])
    assert (job.lattice.nx, job.lattice.nt) == (64, 40)
    assert job.make_values()["dispersion"] == 0.5
    assert job.output.folder == "runs/else"
    assert load_job(path).lattice.nx == 48


def test_defaults_are_filled_in(tmp_path: Path) -> None:
    job = load_job(written(tmp_path, FILM, "first.toml"))
    assert job.solve.free == ("period", "drift_x")
    assert job.solve.mean == {"u": 0.0}
    assert job.output.folder == "runs/first"
    assert job.make_values() == {
        "period": 20.0, "length_x": 22.0, "drift_x": 0.0, "source_u": 0.0, "dispersion": 0.0
    }  # fmt: skip
    assert job.make_lattice().shape == (40, 1, 48)


def test_what_is_free_by_default_suits_the_law(tmp_path: Path) -> None:
    free = {name: load_job(written(tmp_path, base)).solve.free for name, base in BASES.items()}
    assert free == {
        "film": ("period", "drift_x"),
        "film-2d": ("period", "drift_x", "drift_y"),
        "shear": ("period", "drift_x"),
        "waves": ("period", "drift_x", "rotation"),
        "own": ("period",),
    }


def test_a_steady_state_has_no_period(tmp_path: Path) -> None:
    base = {**FILM, "box": {"length_x": 22.0}, "lattice": {"nt": 1, "nx": 48}}
    job = load_job(written(tmp_path, base))
    assert job.solve.free == ("drift_x",)
    assert job.make_values()["period"] == 1.0
    assert "must not name period for lattice.nt = 1" in refusal(tmp_path, base, "solve.free=['period']")


def test_a_length_or_a_parameter_may_be_free_instead_of_the_period(tmp_path: Path) -> None:
    path = written(tmp_path, FILM)
    for name in ("length_x", "dispersion"):
        assert load_job(path, [f"solve.free=['{name}', 'drift_x']"]).solve.free == (name, "drift_x")


def test_naming_a_source_that_is_free_anyway_changes_nothing(tmp_path: Path) -> None:
    job = load_job(written(tmp_path, FILM), ["solve.free=['period', 'drift_x', 'source_u']"])
    assert job.solve.free == ("period", "drift_x")


def test_a_held_drift_is_a_caution(tmp_path: Path) -> None:
    path = written(tmp_path, FILM)
    _, none = load_job_with_cautions(path)
    _, cautions = load_job_with_cautions(path, ["solve.free=['period']"])
    assert none == ()
    assert len(cautions) == 1
    assert "drift_x is held although the law is the same all along that axis" in cautions[0]


@pytest.mark.parametrize("base", BASE_NAMES)
def test_a_resolved_job_written_as_toml_is_read_as_the_same_job(tmp_path: Path, base: str) -> None:
    job = load_job(written(tmp_path, BASES[base]))
    again = tmp_path / "again.toml"
    again.write_text(job_to_toml(job), encoding="utf-8")
    assert load_job(again) == job


def test_a_job_cannot_be_changed_and_survives_pickling(tmp_path: Path) -> None:
    import pickle

    job = load_job(written(tmp_path, FILM))
    with pytest.raises(Exception, match="frozen"):
        job.lattice.nx = 3  # type: ignore[misc]
    assert pickle.loads(pickle.dumps(job)) == job


def test_own_parameters_keep_unit_and_meaning(tmp_path: Path) -> None:
    nu = {"default": 0.2, "unit": "m2/s", "meaning": "viscosity"}
    law = {**OWN["law"], "parameters": {"nu": nu, "force": 1}}
    job = load_job(written(tmp_path, {**OWN, "law": law}))
    assert Parameter("nu", 0.2, "m2/s", "viscosity") in job.make_law().parameters
    assert job.make_values()["nu"] == 0.2


def test_a_start_file_is_found_beside_the_job_first_and_else_in_the_current_folder(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "jobs").mkdir()
    (tmp_path / "here").mkdir()
    monkeypatch.chdir(tmp_path / "here")
    path = written(tmp_path / "jobs", {**FILM, "start": {"kind": "array", "file": "field.npy"}})
    np.save(tmp_path / "here" / "field.npy", np.zeros((40, 48, 1)))
    assert load_job(path).start.file == str(tmp_path / "here" / "field.npy")  # type: ignore[union-attr]
    np.save(tmp_path / "jobs" / "field.npy", np.zeros((40, 48, 1)))
    assert load_job(path).start.file == str(tmp_path / "jobs" / "field.npy")  # type: ignore[union-attr]


def test_marching_matches_the_drift_that_is_free_and_not_given(tmp_path: Path) -> None:
    path = written(tmp_path, FILM)
    assert load_job(path).start.match_drift == ("x",)  # type: ignore[union-attr]
    assert load_job(path, ["box.drift_x=0.0"]).start.match_drift == ()  # type: ignore[union-attr]
    assert load_job(path, ["solve.free=['period']"]).start.match_drift == ()  # type: ignore[union-attr]


def stored_state(folder: Path, law_name: str = "kuramoto-sivashinsky", nt: int = 24) -> Path:
    from mpi4py import MPI

    from lattice.geometry.block import Block
    from lattice.geometry.lattice import Lattice
    from lattice.laws.catalogue import load_law
    from lattice.store.statefile import StateMeta, write_state

    law, lattice = load_law(law_name), Lattice(nt=nt, ny=1, nx=32)
    values = {"period": 17.5, "length_x": 21.0, "drift_x": 0.25, "source_u": 0.0, "dispersion": 0.125}
    meta = StateMeta.of_law(law, lattice, values)
    field = np.zeros((nt, 1, 32, len(law.components)))
    write_state(folder / "state.h5", field, Block.whole(lattice), meta, MPI.COMM_SELF)
    return folder / "state.h5"


def test_what_the_job_leaves_out_comes_from_the_stored_state(tmp_path: Path) -> None:
    stored_state(tmp_path)
    base = {**FILM, "box": {"length_x": 22.0}, "start": {"kind": "state", "file": "state.h5"}}
    job = load_job(written(tmp_path, base))
    assert job.make_values() == {
        "period": 17.5, "length_x": 22.0, "drift_x": 0.25, "source_u": 0.0, "dispersion": 0.125
    }  # fmt: skip
    assert (
        load_job(written(tmp_path, base), ["law.parameters.dispersion=0.5"]).make_values()["dispersion"]
        == 0.5
    )


def test_a_stored_state_of_another_law_is_refused(tmp_path: Path) -> None:
    stored_state(tmp_path, "ginzburg-landau")
    base = {**FILM, "start": {"kind": "state", "file": "state.h5"}}
    assert "start.file: must hold components u in 1 dimension(s), got u, v in 1" in refusal(tmp_path, base)


def test_a_steady_state_cannot_give_a_period(tmp_path: Path) -> None:
    stored_state(tmp_path, nt=1)
    base = {**FILM, "box": {"length_x": 22.0}, "start": {"kind": "state", "file": "state.h5"}}
    assert "box.period: is required: the stored state is steady or travelling" in refusal(tmp_path, base)


def test_a_start_file_that_is_no_state_is_refused(tmp_path: Path) -> None:
    (tmp_path / "state.h5").write_bytes(b"not HDF5 at all")
    base = {**FILM, "start": {"kind": "state", "file": "state.h5"}}
    assert "start.file: " in refusal(tmp_path, base)


def test_a_lattice_that_misses_growing_waves_is_a_caution(tmp_path: Path) -> None:
    path = written(tmp_path, FILM)
    assert resolution_cautions(load_job(path)) == ()
    (caution,) = resolution_cautions(load_job(path, ["box.length_x=62.83185307179586", "lattice.order_x=2"]))
    # Growth k**2 - k**4 ends at k = 1: wavelength 2 pi, the tenth harmonic of 20 pi does not grow.
    assert "lattice.nx = 48 is coarse: waves as short as 6.98 grow" in caution
    wanted = int(re.search(r"nx = (\d+) or more", caution)[1])  # type: ignore[index]
    assert resolution_cautions(load_job(path, [f"lattice.nx={wanted}", *HUGE_ORDER_2])) == ()
    assert len(resolution_cautions(load_job(path, [f"lattice.nx={wanted - 1}", *HUGE_ORDER_2]))) == 1


HUGE_ORDER_2 = ["box.length_x=62.83185307179586", "lattice.order_x=2"]


def test_too_many_ranks_are_refused_with_the_largest_count_that_works(tmp_path: Path) -> None:
    job = load_job(written(tmp_path, FILM))
    check_ranks(job, 2)
    with pytest.raises(InputError, match=r"largest count that works is (\d+)") as caught:
        check_ranks(job, 100_000)
    most = int(re.search(r"works is (\d+)", str(caught.value))[1])  # type: ignore[index]
    check_ranks(job, most)
    with pytest.raises(InputError, match=f"got {most + 1} ranks"):
        check_ranks(job, most + 1)


def test_a_rank_count_that_does_not_divide_is_told_the_next_that_fits(tmp_path: Path) -> None:
    job = load_job(written(tmp_path, FILM))
    with pytest.raises(InputError, match=r"the next below 101 is (\d+)") as caught:
        check_ranks(job, 101)
    check_ranks(job, int(re.search(r"below 101 is (\d+)", str(caught.value))[1]))  # type: ignore[index]


def test_every_start_and_preconditioner_is_named_once_everywhere() -> None:
    assert set(START_KINDS) == set(START_MODELS) == set(STARTS)
    assert set(PRECONDITIONERS) == set(NAMES)


def test_the_reference_lists_every_key_with_a_meaning() -> None:
    rows = [line for line in job_reference().splitlines() if line.startswith("| `")]
    cells = [[cell.strip() for cell in row.strip("|").split(" | ")] for row in rows]
    assert all(len(row) == 4 and all(row) for row in cells)
    listed = {row[0].strip("`") for row in cells}
    tables = {"kind", "coarse", "patches", "subspace", "damped", "refine"}
    assert listed >= {key for _, key in KEYS} - tables
    assert listed >= {*CoarseSection.model_fields, *PatchesSection.model_fields}


def test_the_page_of_keys_is_up_to_date() -> None:
    page = (ROOT / "jobs" / "reference.md").read_text(encoding="utf-8")
    assert job_reference().strip() in page, "run .venv/bin/python .ci/write_reference.py"
