"""`lattice check` and `lattice observe` as commands, on one rank and on several."""

from __future__ import annotations

import json

import pytest

from lattice.cli.main import main
from lattice.store.certificates import read_certificate
from tests.checking import FILM, check, odd_film, store, travelling_wave
from tests.mpi import run_module


@pytest.fixture(scope="module")
def wave(tmp_path_factory):
    """Store the travelling wave of alpha = 13.5 (see test_certificates)."""
    lattice, state = travelling_wave(32, 11.5429484715, 0.2263360073)
    return store(tmp_path_factory.mktemp("wave") / "state.h5", FILM, lattice, state, ("drift_x",))


def test_json_and_exit_codes_tell_the_verdict(wave, capsys):
    assert main(["check", str(wave), "--refinements", "0", "--json"]) == 6
    refused = json.loads(capsys.readouterr().out)
    assert refused["verdict"] == "not certified"
    assert [c["name"] for c in refused["criteria"] if c["result"] != "passed"] == ["refinement"]
    assert main(["check", str(wave), "--refinements", "1", "--json", "--observable", "slope=u_x**2"]) == 5
    wide = json.loads(capsys.readouterr().out)
    assert wide["verdict"] == "certified with wide bands"  # two lattices show no order
    assert wide["bands"]["slope"]["kind"] == "assumed"
    assert main(["check", str(wave.parent)]) == 0
    text = capsys.readouterr().out
    assert "verdict: CERTIFIED" in text
    assert "says nothing about the plant" in " ".join(text.split())
    assert max(len(line) for line in text.splitlines() if "state.h5" not in line) <= 100
    assert main(["check", str(wave), "--refinements", "0"]) == 6
    assert "keeps its certificate" in capsys.readouterr().out
    assert read_certificate(wave).record["verdict"] == "certified"
    assert main(["info", str(wave)]) == 0
    assert "This state is certified" in capsys.readouterr().out


@pytest.mark.parametrize(
    "wrong",
    [["--factor", "1.01"], ["--refinements", "9"], ["--preconditioner", "best"], ["--threshold", "march=0"],
     ["--observable", "u"], ["--thresholds", "absent.toml"]],
)  # fmt: skip
def test_wrong_options_are_refused(wave, wrong, capsys):
    assert main(["check", str(wave), *wrong]) == 2
    assert "error:" in capsys.readouterr().err


def test_observe_shows_bands_and_compares_states_with_a_march(wave, tmp_path, capsys):
    check(wave)
    assert main(["observe", str(wave), "--out", str(tmp_path / "one.png"), "--json"]) == 0
    (found,) = json.loads(capsys.readouterr().out)["states"]
    assert found["certificate"] == "certified"
    square = found["observables"]["mean_square"]
    # <u^2> of this wave: independent recomputation, 0.9451636980.
    assert abs(square["extrapolated"] - 0.9451636980) < square["band"]
    assert (tmp_path / "one.png").stat().st_size > 10_000
    lattice, other = odd_film(17.631043132046, 36, 28)
    store(tmp_path / "odd.h5", FILM, lattice, other, ("period", "drift_x"))
    arguments = ["observe", str(wave), str(tmp_path / "odd.h5"), "--weight", "equal", "--json"]
    assert main([*arguments, "--march", "400", "--length-x", "60"]) == 0
    record = json.loads(capsys.readouterr().out)
    assert record["means"]["effective_states"] == pytest.approx(2.0)
    squares = [s["observables"]["mean_square"]["value"] for s in record["states"]]
    assert record["means"]["mean"]["mean_square"] == pytest.approx(sum(squares) / 2.0, rel=1e-12)
    assert record["means"]["spread"]["mean_square"] == pytest.approx(
        abs(squares[0] - squares[1]) / 2.0, rel=1e-12
    )
    # <u^2> = 1.71(2) at L = 60 (independent recomputation, ETDRK4); within the march's own standard error.
    march, error = (record["march"][key]["mean_square"] for key in ("mean", "standard_error"))
    assert march == pytest.approx(1.71, abs=4.0 * error + 0.02)
    assert record["march"]["mean"]["production"] == pytest.approx(
        record["march"]["mean"]["dissipation"], rel=0.02
    )


@pytest.mark.long
def test_ranks_change_nothing(tmp_path):
    lattice, state = odd_film(17.631043132046, 36, 28)
    path = store(tmp_path / "state.h5", FILM, lattice, state, ("period", "drift_x"))
    alone = check(path, refinements=0, store=False).record
    done = run_module(2, "lattice", "check", path, "--refinements", "0", "--json", timeout=120.0, check=False)
    assert done.returncode == 6, done.stderr
    together = json.loads(done.stdout)
    assert together["ranks"] == 2
    assert together["inputs"] == alone["inputs"]
    assert [c["result"] for c in together["criteria"]] == [c["result"] for c in alone["criteria"]]
    for name, band in alone["bands"].items():
        assert together["bands"][name]["value"] == pytest.approx(band["value"], rel=1e-9, abs=1e-9)
        assert together["bands"][name]["half"] == pytest.approx(band["half"], rel=1e-4, abs=1e-8)
    one, two = (r["findings"]["march"] for r in (alone, together))
    assert two["mismatches"] == pytest.approx(one["mismatches"], rel=1e-4)
    assert two["growths"] == pytest.approx(one["growths"], rel=1e-4)
