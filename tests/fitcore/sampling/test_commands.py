"""The commands `weakmix sample` and `weakmix chain` on the bundled inputs."""

import json

import numpy as np
import pytest
from click.testing import CliRunner

pytest.importorskip("emcee")

from fitcore.commands import chain as chain_command
from fitcore.commands import fit as fit_command
from fitcore.commands import profile as profile_command
from fitcore.commands import sample as sample_command
from fitcore.commands import show as show_command
from fitcore.commands.errors import report_errors
from fitcore.commands.progress import describe, duration
from fitcore.sampling.chain_file import ChainFile
from fitcore.sampling.sample_result import Progress


def run(command, *arguments):
    """Run a command as the group does; returns click's result."""
    import click

    class Reporting(click.Group):
        def invoke(self, ctx):
            with report_errors():
                return super().invoke(ctx)

    group = Reporting(commands={command.name: command})
    return CliRunner().invoke(group, [command.name, *map(str, arguments)], prog_name="weakmix")


@pytest.fixture(scope="module")
def chain(tmp_path_factory):
    path = tmp_path_factory.mktemp("chain") / "averages.h5"
    result = run(
        sample_command.command, "averages-2026-tree", "--chain", path, "--effective", 1000, "--json", "-"
    )
    assert result.exit_code == 0, result.output
    return path, json.loads(result.stdout)


def test_sample_tells_what_it_found(chain):
    path, content = chain
    assert path.exists()
    assert content["valid"]
    assert content["parameters"]["wolfenstein_A"]["mean"] == pytest.approx(0.802, abs=0.01)
    assert set(content["parameters"]["wolfenstein_A"]["intervals"]) == {"0.6827", "0.9545"}
    assert content["diagnostics"]["status"] == "reliable"
    assert content["inputs"]["name"] == "averages-2026-tree"


def test_resuming_with_the_same_command_does_nothing_more(chain):
    path, content = chain
    again = run(
        sample_command.command, "averages-2026-tree", "--chain", path, "--effective", 1000, "--json", "-"
    )
    assert again.exit_code == 0, again.output
    assert json.loads(again.stdout)["steps"] == content["steps"]


def test_other_inputs_are_refused_with_the_differences(chain):
    result = run(sample_command.command, "averages-2026", "--chain", chain[0], "--until", 10)
    assert result.exit_code == 2
    assert "different problem" in result.stderr
    assert "parameters only in the present problem" in result.stderr
    assert "Traceback" not in result.output


def test_chain_that_is_too_short_exits_1(tmp_path):
    result = run(sample_command.command, "averages-2026-tree", "--chain", tmp_path / "c.h5", "--until", 10)
    assert result.exit_code == 1
    assert "Do not use this chain yet" in result.stderr


def test_run_folder(tmp_path):
    result = run(
        sample_command.command, "averages-2026-tree", "--chain", tmp_path / "c.h5", "--effective", 500,
        "--out", tmp_path / "run", "--quiet",
    )  # fmt: skip
    assert result.exit_code == 0, result.output
    assert {"result.json", "inputs.toml", "run.json"} <= {p.name for p in (tmp_path / "run").iterdir()}


def test_chain_verify(chain, tmp_path):
    result = run(chain_command.command, "verify", chain[0])
    assert result.exit_code == 0
    assert "sound" in result.stdout
    broken = tmp_path / "broken.h5"
    broken.write_bytes(chain[0].read_bytes()[:5000])
    result = run(chain_command.command, "verify", broken)
    assert result.exit_code == 2
    assert "cannot read or write" in result.stderr


def test_chain_derive_and_summary(chain, tmp_path):
    result = run(chain_command.command, "derive", chain[0], "angle_gamma", "jarlskog")
    assert result.exit_code == 0, result.output
    assert "angle_gamma" in result.stdout
    assert "was there already" in run(chain_command.command, "derive", chain[0], "jarlskog").stdout
    result = run(chain_command.command, "derive", chain[0], "angle_gama")
    assert result.exit_code == 2
    assert "angle_gamma" in result.stderr

    out = tmp_path / "figures"
    result = run(
        chain_command.command, "summary", chain[0], "--name", "angle_gamma", "--name", "wolfenstein_A",
        "--out", out, "--json", "-",
    )  # fmt: skip
    assert result.exit_code == 0, result.output
    content = json.loads(result.stdout)
    assert content["parameters"]["angle_gamma"]["mean"] == pytest.approx(66.4, abs=1.5)
    assert content["parameters"]["angle_gamma"]["unit"] == "deg"
    assert {p.suffix for p in out.iterdir()} == {".pdf", ".png", ".csv"}
    result = run(chain_command.command, "summary", chain[0], "--against", tmp_path)
    assert result.exit_code == 2
    assert "is not the run folder of a fit or a profile" in result.stderr


class TestSummaryAgainst:
    NAMES = ("--name", "wolfenstein_rhobar", "--name", "wolfenstein_etabar")

    def test_fit(self, chain, tmp_path):
        fit = run(fit_command.command, "averages-2026-tree", "--out", tmp_path / "fit", "--no-figures")
        assert fit.exit_code == 0, fit.output
        result = run(chain_command.command, "summary", chain[0], "--against", tmp_path / "fit", *self.NAMES)
        assert result.exit_code == 0, result.output
        assert "fit 68.27 %" in result.stdout
        assert "profile 68.27 %" not in result.stdout
        assert "] profile" in next(
            x for x in result.stdout.splitlines() if x.startswith("wolfenstein_rhobar")
        )
        assert "differs from the chain" not in result.stdout

    def test_profile_of_one_quantity(self, chain, tmp_path):
        grid = "wolfenstein_rhobar=0.08:0.25:41"
        made = run(
            profile_command.command, "averages-2026-tree", grid, "--out", tmp_path / "p", "--no-figures"
        )
        assert made.exit_code == 0, made.output
        result = run(chain_command.command, "summary", chain[0], "--against", tmp_path / "p", *self.NAMES)
        assert result.exit_code == 0, result.output
        # Near the published-inputs value .1655 +206-196 of the tree-level fit.
        lines = result.stdout.splitlines()
        assert "[0.146, 0.186]" in next(line for line in lines if line.startswith("wolfenstein_rhobar"))
        assert " - " in next(line for line in lines if line.startswith("wolfenstein_etabar"))

    def test_profile_in_a_plane_is_drawn_over_the_posterior(self, chain, tmp_path):
        grids = ("wolfenstein_rhobar=0.08:0.25:30", "wolfenstein_etabar=0.28:0.47:30")
        made = run(
            profile_command.command, "averages-2026-tree", *grids, "--out", tmp_path / "p", "--no-figures"
        )
        assert made.exit_code == 0, made.output
        result = run(
            chain_command.command, "summary", chain[0], "--against", tmp_path / "p", *self.NAMES,
            "--out", tmp_path / "figures",
        )  # fmt: skip
        assert result.exit_code == 0, result.output
        regions = {line.split(",")[0] for line in _data_rows(tmp_path / "figures" / "posterior-plane.csv")}
        assert '"profile 68.27 %' in regions
        assert "68.27 %" in regions
        result = run(chain_command.command, "summary", chain[0], "--against", tmp_path / "p", *self.NAMES)
        assert "give --out to draw it" in result.stdout

    def test_other_problem_is_pointed_out(self, chain, tmp_path):
        entry = json.loads(run(show_command.command, "averages-2026-tree", "--json", "-").stdout)["entries"][
            0
        ]
        settings = ("--set", f"{entry['id']}.inflate=1.5")
        fit = run(
            fit_command.command, "averages-2026-tree", *settings, "--out", tmp_path / "f", "--no-figures"
        )
        assert fit.exit_code == 0, fit.output
        result = run(chain_command.command, "summary", chain[0], "--against", tmp_path / "f", *self.NAMES)
        assert "differs from the chain in its inputs" in result.stdout


def _data_rows(path):
    return path.read_text(encoding="utf-8").splitlines()[1:]


def test_chain_summary_with_evidence(chain):
    result = run(chain_command.command, "summary", chain[0], "--evidence", "--json", "-")
    assert result.exit_code == 0, result.output
    found = json.loads(result.stdout)["evidence"]
    assert found["valid"]
    assert found["error"] < 0.02
    assert found["pareto_k"] < 0.7
    shown = run(chain_command.command, "summary", chain[0], "--evidence").stdout
    assert f"ln Z = {found['log_evidence']:.2f}"[:-1] in shown


def test_derive_a_quantity_of_a_users_module(chain, tmp_path):
    module = tmp_path / "my_ratio.py"
    module.write_text(
        "from observables.catalogue import Real, quantity\n\n\n"
        '@quantity(unit="1", title="ratio of magnitudes", cp="even", source="invented")\n'
        "def my_own_ratio(magnitude_V_ub, magnitude_V_cb) -> Real:\n"
        "    return magnitude_V_ub / magnitude_V_cb\n"
    )
    copy = tmp_path / "copy.h5"
    copy.write_bytes(chain[0].read_bytes())
    result = run(chain_command.command, "derive", copy, "my_own_ratio")
    assert result.exit_code == 2
    result = run(chain_command.command, "derive", copy, "my_own_ratio", "magnitude_V_ub", "--module", module)
    assert result.exit_code == 0, result.output
    assert run(chain_command.command, "derive", copy, "magnitude_V_cb").exit_code == 0
    with ChainFile.open(copy) as stored:
        (block, *_) = stored.blocks(derived=("my_own_ratio", "magnitude_V_ub", "magnitude_V_cb"))
    found = block.derived
    np.testing.assert_allclose(found["my_own_ratio"], found["magnitude_V_ub"] / found["magnitude_V_cb"])
    # Looking at what is stored needs no module.
    shown = run(chain_command.command, "summary", copy, "--name", "my_own_ratio")
    assert shown.exit_code == 0, shown.output
    assert "my_own_ratio" in shown.stdout


def test_chain_export(chain, tmp_path):
    target = tmp_path / "c.npz"
    result = run(chain_command.command, "export", chain[0], "--format", "npz", "--to", target, "--thin", 10)
    assert result.exit_code == 0
    assert target.exists()
    result = run(chain_command.command, "export", chain[0], "--format", "npz", "--to", target)
    assert result.exit_code == 2
    assert "exists already" in result.stderr


def test_chain_export_goes_by_the_ending(chain, tmp_path):
    target = tmp_path / "c.nc"
    result = run(chain_command.command, "export", chain[0], "--to", target, "--thin", 50, "--json", "-")
    assert result.exit_code == 0, result.output
    assert json.loads(result.stdout)["format"] == "netcdf"
    assert target.read_bytes()[1:4] == b"HDF"
    for wrong in (("--to", tmp_path / "c.dat"), (), ("--format", "csv", "--to", tmp_path / "d.nc")):
        refused = run(chain_command.command, "export", chain[0], *wrong)
        assert refused.exit_code == 2
        assert "format" in refused.stderr
    assert not (tmp_path / "d.nc").exists()


def test_interrupt_prints_the_command_that_goes_on(tmp_path, monkeypatch):
    """Ctrl-C after some blocks: exit 0, everything kept, the resume command on the screen."""
    import signal

    from fitcore.commands import progress

    def interrupt(self, state):
        if state.phase == "chain" and state.steps >= 128:
            signal.raise_signal(signal.SIGINT)

    monkeypatch.setattr(progress.ChainProgress, "__call__", interrupt)
    path = tmp_path / "my chain.h5"
    arguments = ["averages-2026", "--chain", path, "--without", "alpha-average", "--until", 100_000]
    result = run(sample_command.command, *arguments)
    assert result.exit_code == 0, result.output
    assert "steps are safe" in result.stdout
    assert f"sample averages-2026 --chain '{path}' --without alpha-average --until 100000" in result.stdout
    assert run(chain_command.command, "verify", path).exit_code == 0


def test_interrupt_during_the_pilot_run(tmp_path, monkeypatch):
    from fitcore.commands import progress

    def interrupt(self, state):
        raise KeyboardInterrupt

    monkeypatch.setattr(progress.ChainProgress, "__call__", interrupt)
    result = run(sample_command.command, "averages-2026-tree", "--chain", tmp_path / "c.h5", "--until", 50)
    assert result.exit_code == 0
    assert "Interrupted during the pilot run" in result.stdout
    monkeypatch.undo()
    result = run(
        sample_command.command, "averages-2026-tree", "--chain", tmp_path / "c.h5", "--effective", 500
    )
    assert result.exit_code == 0, result.output


def test_progress_in_words():
    state = Progress("chain", 512, 192, 98765.4, 1234.0, 2.345, 0.61, 3.0, 7000.0)
    assert describe(state) == (
        "512 steps of 192 walkers, 98765 points/s, acceptance 0.61, autocorrelation time 2.3, 1234 effective, "
        "1.9 h to go"
    )
    assert duration(89) == "89 s"
    assert duration(600) == "10 min"
