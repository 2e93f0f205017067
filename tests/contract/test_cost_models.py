"""Cost models: what the files may say, how mistakes are told, and that costs are sums anybody can redo."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from patchwalk.commands.backends import timed
from patchwalk.cost import PRICES, priced
from patchwalk.evidence.cost_models import CostModel, cost_of, costs_of, hops_of, read_cost_model
from patchwalk.settings_checks import SettingsError
from patchwalk.subsolvers.conformance_trial import glass
from patchwalk.subsolvers.contract import Work
from patchwalk.subsolvers.registry import subsolver_from

CONFIGS = Path(__file__).resolve().parents[2] / "configs"
WALKED = Work(
    shots=np.array([1, 4]), evolution_time=np.array([2.0, 6.0]), amplitude_updates=np.array([1000, 4000]),
    energies=np.array([256, 256]),
)  # fmt: skip
SWEPT = Work(shots=np.array([1, 1]), spin_updates=np.array([320, 640]))


@pytest.mark.parametrize("name", ["device-fast-invented.toml", "device-slow-invented.toml"])
def test_the_example_devices_are_labelled_invented(name: str) -> None:
    model = read_cost_model(CONFIGS / name)
    assert model.device is not None
    assert "invented" in model.about
    assert (CONFIGS / name).read_text().startswith("# Invented")


def test_a_devices_parts_add_up() -> None:
    model = CostModel({"load_s": 1.0, "evolve_s_per_hop": 0.25, "read_s": 0.5, "wait_s": 0.125})
    costs = costs_of(model, WALKED, 2, hops=np.array([0.8, 3.2]))
    assert costs.load.tolist() == [1.0, 1.0]
    assert costs.read.tolist() == [0.5, 2.0]
    assert costs.wait.tolist() == [0.125, 0.5]
    assert costs.evolve.tolist() == pytest.approx([0.2, 0.8])
    assert costs.total.tolist() == pytest.approx((costs.held + costs.evolve).tolist())
    assert cost_of(model, WALKED, 2).tolist() == pytest.approx([1.875, 4.5])  # a shot is a hop where hops are not told


def test_whoever_does_not_evolve_is_priced_as_this_machine() -> None:
    device = read_cost_model(CONFIGS / "device-fast-invented.toml")
    assert np.array_equal(cost_of(device, SWEPT, 2), priced(SWEPT, 2))
    assert np.array_equal(cost_of(CostModel(), WALKED, 2), priced(WALKED, 2))
    assert not costs_of(CostModel(), WALKED, 2).held.any()


def test_seconds_that_a_device_tells_count_as_they_are() -> None:
    told = Work(shots=np.array([2]), load_s=np.array([0.5]), wait_s=np.array([0.25]))
    assert cost_of(CostModel(), told, 1).tolist() == [0.75]


def test_prices_left_out_are_the_fixed_ones(tmp_path: Path) -> None:
    (tmp_path / "prices.toml").write_text("[prices]\nspin_updates = 1e-3\n")
    model = read_cost_model(tmp_path / "prices.toml")
    assert cost_of(model, SWEPT, 2).tolist() == pytest.approx([0.32, 0.64])
    assert model.prices["energies"] == PRICES["energies"]
    assert model.device is None


def test_what_backends_measures_can_be_read(tmp_path: Path) -> None:
    (tmp_path / "measured.toml").write_text(timed("uniform", 40, 4).as_toml())
    assert read_cost_model(tmp_path / "measured.toml").prices["spin_updates"] != PRICES["spin_updates"]


@pytest.mark.parametrize("name", ["walk,time_in_hops=0.8,shots=3", "walk,driver=complete,time_in_hops=0.8,hopping=2.5",
                                  "walk,time_in_hops=0.8,hopping_factor=1.5"])  # fmt: skip
def test_hops_are_those_that_were_asked_for(name: str) -> None:
    """Each of three shots, or of one, lasts 0.8 hops by its parameter."""
    batch, subsolver = glass(4, 5), subsolver_from(name)
    work = subsolver.propose(batch).work
    hops = hops_of(subsolver, batch, work)
    assert hops is not None
    assert work.shots is not None
    np.testing.assert_allclose(hops, 0.8 * work.shots, rtol=1e-12)
    assert hops_of(subsolver_from("tabu"), batch, SWEPT) is None


@pytest.mark.parametrize(
    ("text", "sentences"),
    [
        ("[device]\nload_s = 1\nevolve_s_per_hop = 1\nread_s = 1\n", ["device.wait_s: is missing"]),
        ("[prices]\nspin_update = 1.0\n", ["prices.spin_update: unknown; did you mean spin_updates?"]),
        (
            "[prices]\nenergies = -1.0\nspin_updates = true\n",
            ["prices.energies: is -1.0", "prices.spin_updates: is True"],
        ),
        ("[prices]\nenergies = inf\n", ["prices.energies: is inf"]),
        ("[devices]\n", ["devices: unknown; did you mean device?", "needs a table [device] or [prices]"]),
        ("device = 3\n", ["device: is 3; give a table, [device]"]),
        ("about = 3\n[prices]\n", ["about: is 3"]),
        ("[prices\n", ["not a TOML file"]),
    ],
)
def test_mistakes_name_file_and_key(tmp_path: Path, text: str, sentences: list[str]) -> None:
    path = tmp_path / "model.toml"
    path.write_text(text)
    with pytest.raises(SettingsError) as caught:
        read_cost_model(path)
    for sentence in sentences:
        assert any(line.startswith(f"{path}: {sentence}") for line in caught.value.complaints), caught.value.complaints


def test_a_file_that_is_not_there(tmp_path: Path) -> None:
    with pytest.raises(SettingsError, match=r"nowhere\.toml"):
        read_cost_model(tmp_path / "nowhere.toml")
