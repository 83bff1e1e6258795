"""The coupled world and its honest ledger."""

import numpy as np
import pytest

from mock_instruments import World, WorldSpec
from mock_instruments.flux import saturation_current


@pytest.fixture
def world(mapping):
    world = World(WorldSpec.from_mapping(mapping))
    world.move_relays((101, 201))
    world.set_supply(on=True, voltage=12.0, limit=1.0)
    world.advance(2.0)
    return world


def test_a_new_bench_is_cold_and_dead(mapping):
    ledger = World(WorldSpec.from_mapping(mapping)).ledger.as_mapping()
    assert ledger["largest"] == {
        "current": 0.0, "part_current": {"1": 0.0, "2": 0.0, "3": 0.0}, "bank_voltage": 0.0, "bank_energy": 0.0,
        "pulse_energy": 0.0, "mean_power": 0.0, "body_degC": {"1": 23.0, "2": 23.0, "3": 23.0},
        "chamber_degC": [23.0, 23.0],
    }  # fmt: skip


def test_the_ledger_keeps_the_largest(world):
    first = world.fire(15e-6)
    second = world.fire(5e-6)
    assert second.shot.peak < first.shot.peak
    assert world.ledger.current == first.shot.peak
    assert world.ledger.part_current == {1: first.shot.peak, 2: 0.0, 3: 0.0}
    assert world.ledger.pulse_energy == first.shot.delivered
    assert world.ledger.pulses == 2
    assert world.ledger.bank_voltage == pytest.approx(12.0, abs=1e-3)
    assert world.ledger.bank_energy == pytest.approx(0.5 * 7e-3 * 12.0**2, rel=1e-3)  # ½ C U²
    # Mean over the last minute, by hand.
    assert world.ledger.mean_power == pytest.approx((first.shot.delivered + second.shot.delivered) / 60.0)


def test_old_pulses_leave_the_mean_power(world):
    energy = world.fire(10e-6).shot.delivered
    world.advance(100.0)
    world.fire(10e-6)
    assert world.ledger.mean_power == pytest.approx(energy / 60.0, rel=1e-3)


@pytest.mark.parametrize("relays", [(), (101,), (201,), (101, 202), (105, 201)])
def test_no_current_without_both_relays(world, relays):
    world.set_supply(on=True, voltage=12.0, limit=1.0)
    world.move_relays(relays)
    pulse = world.fire(10e-6)
    assert pulse.shot is None
    assert world.ledger.current == 0.0
    t = np.array([-1e-6, 5e-6, 11e-6])
    assert pulse.shunt(t) == pytest.approx([0.0, 0.0, 0.0])
    assert pulse.voltage(t) == pytest.approx([0.0, 12.0, 0.0], abs=1e-3)  # an open fixture shows the bank


def test_relays_moved_on_a_charged_bank_or_under_current_are_written_down(world):
    assert world.ledger.relay_moves_on_charged_bank == 0  # closed before it was charged
    world.move_relays((101, 202))
    assert world.ledger.relay_moves_on_charged_bank == 1
    world.set_supply(on=False, voltage=0.0, limit=0.0)
    world.advance(60.0)
    world.set_bias(on=True, current=5.0, voltage_limit=5.0)
    world.advance(2.0)
    world.move_relays((101, 202))  # nothing moves
    assert world.ledger.relay_moves_under_current == 0
    world.move_relays(())
    assert world.ledger.relay_moves_under_current == 1
    assert world.ledger.relay_moves_on_charged_bank == 1
    assert world.bias_current == 0.0  # its path is open
    assert world.ledger.part_current[1] == pytest.approx(5.0)


def test_joined_paths_and_parts_are_misuse(world):
    world.move_relays((101, 201, 203))
    assert (world.ledger.paths_joined, world.ledger.parts_joined) == (1, 0)
    world.move_relays((101, 102, 201))
    assert (world.ledger.paths_joined, world.ledger.parts_joined) == (1, 1)


def test_pulses_warm_the_part_and_sag_the_bank(world):
    before = world.body_degC(1)
    full = world.bank_voltage
    pulse = world.fire(16e-6)
    assert pulse.shot.bank_after < full
    world.set_supply(on=False, voltage=0.0, limit=0.0)
    for _ in range(20):
        world.fire(16e-6)
    assert world.body_degC(1) > before
    # 20 pulses of some 60 uC each from 7 mF
    assert full - world.bank_voltage == pytest.approx(20 * 16e-6 * 4.9 / 7e-3, rel=0.25)


def test_the_hot_part_saturates_earlier_and_resists_more(world):
    cold = world.fire(16e-6).shot.peak
    resistance = world.parts[1].winding_resistance
    world.set_chamber(on=True, setpoint_degC=125.0)
    world.advance(4 * 3600.0)
    assert world.fire(16e-6).shot.peak > 1.3 * cold
    # Copper law (IEC 60028) between the two body temperatures
    body = world.body_degC(1)
    assert world.parts[1].winding_resistance / resistance == pytest.approx(
        (1 + 0.00393 * (body - 20)) / (1 + 0.00393 * 3), rel=1e-3
    )
    assert world.ledger.chamber_degC[1] > 125.0 - world.spec.chamber_offset  # overshoot is in the ledger
    assert world.ledger.body_degC[1] > 124.0


@pytest.mark.parametrize("polarity", [1, -1])
def test_conditioning_without_a_digitizer_magnetises(mapping, polarity):
    world = World(WorldSpec.from_mapping({**mapping, "parts": {"1": {"law": "remanent"}}}))
    world.move_relays((101, 201))
    world.set_supply(on=True, voltage=12.0, limit=1.0)
    world.advance(2.0)
    peaks = []
    for _ in range(4):
        peaks.append(world.fire(26e-6, polarity=polarity).shot.peak)
        world.advance(0.5)
    assert peaks[0] < peaks[1] - 0.1  # the first shot has more flux to swing through
    assert peaks[3] == pytest.approx(peaks[2], rel=2e-3)
    assert world.parts[1].offset == pytest.approx(polarity * 0.15 * 8.0, rel=0.02)
    assert world.fire(26e-6, polarity=-polarity).shot.peak < peaks[0]  # against what it remembers: more still


def test_bias_leaves_a_memory_and_both_ways_differ(mapping):
    world = World(WorldSpec.from_mapping({**mapping, "parts": {"1": {"law": "remanent"}}}))
    world.move_relays((101, 202))
    seen = []
    for target in (0.0, 3.0, 9.0, 3.0, 0.0):
        world.set_bias(on=True, current=target, voltage_limit=5.0)
        world.advance(1.0)
        seen.append(world.small_signal()[0])
    assert seen[3] < seen[1]
    assert seen[4] < seen[0]


def test_without_memory_both_ways_agree(mapping):
    world = World(WorldSpec.from_mapping(mapping))
    world.move_relays((101, 202))
    seen = []
    for target in (0.0, 5.0, 9.0, 5.0, 0.0):
        world.set_bias(on=True, current=target, voltage_limit=5.0)
        world.advance(1.0)
        seen.append(world.small_signal()[0])
    assert seen[3] == pytest.approx(seen[1], rel=1e-4)  # the part has warmed a little meanwhile
    assert seen[4] == pytest.approx(seen[0], rel=1e-4)


@pytest.mark.parametrize("seconds", [-1.0, float("nan"), float("inf")])
def test_time_only_goes_forward(world, seconds):
    with pytest.raises(ValueError, match="forward"):
        world.advance(seconds)


def test_advancing_in_pieces_is_advancing(mapping):
    whole, pieces = (World(WorldSpec.from_mapping(mapping)) for _ in range(2))
    for world in (whole, pieces):
        world.set_chamber(on=True, setpoint_degC=60.0)
        world.move_relays((101, 202))
        world.set_bias(on=True, current=6.0, voltage_limit=5.0)
        world.set_supply(on=True, voltage=12.0, limit=1.0)
    whole.advance(900.0)
    for _ in range(900):
        pieces.advance(1.0)
    assert pieces.now == pytest.approx(whole.now)
    assert pieces.body_degC(1) == pytest.approx(
        whole.body_degC(1), abs=0.01
    )  # R(T) and the ramp in steps of 10 s
    assert pieces.bank_voltage == pytest.approx(whole.bank_voltage, rel=1e-9)
    assert pieces.bias_current == pytest.approx(whole.bias_current, rel=1e-9)


def test_a_part_that_opens_or_shorts(world):
    world.parts[1].fault = "open"
    assert world.fire(5e-6).shot is None
    world.parts[1].fault = "short"
    healthy = 12.0 * 5e-6 / 22e-6
    assert world.fire(5e-6).shot.peak > 10 * healthy
    assert world.fire(5e-6, trip_current=18.0).shot.peak < 20.0  # the comparator is what saves it
    world.move_relays((101, 203))
    assert world.path_resistance("resistance") < 0.25 * 18e-3


def test_the_default_noise_and_offsets_are_small_enough_to_extract_from(mapping):
    """With what a client can see, 30 % saturation current and L0 come out near the truth by the plainest means."""
    from mock_instruments import Bench
    from mock_instruments.sampling import Settings, capture

    bench = Bench(WorldSpec.from_mapping(mapping))
    world = bench.world
    world.move_relays((101, 201))
    world.set_supply(on=True, voltage=12.0, limit=1.0)
    world.advance(2.0)
    pulse = world.fire(18e-6)
    spec = world.spec
    noise = np.random.default_rng(5)
    settings = Settings(2200, 1e-8, 200, 20.0, 0.2)
    shots = [capture(pulse, settings, spec.digitizer, spec.trigger_delay, noise) for _ in range(8)]
    volts = np.mean([s.voltage for s in shots], axis=0) * 20.0 / 2048
    amps = np.mean([s.shunt for s in shots], axis=0) * 0.2 / 2048 / 10e-3
    volts, amps = volts - volts[:190].mean(), amps - amps[:190].mean()
    stop = int(200 + 18e-6 / 1e-8)
    linkage = np.cumsum(volts - world.parts[1].winding_resistance * amps)[:stop] * 1e-8
    amps = amps[:stop]
    low = (amps > 0.3) & (amps < 3.0)
    slope, _ = np.polyfit(linkage[low], amps[low], 1)
    assert 1.0 / slope == pytest.approx(22e-6, rel=5e-3)
    knee = saturation_current(spec.parts[1].law.at(world.body_degC(1)).still(), 0.3)
    near = (amps > 0.85 * knee) & (amps < 1.15 * knee)
    # i(λ) near the knee by a cubic; L_d = 1/g' falls to 70 % where g' is slope/0.7.
    cubic = np.polynomial.Polynomial.fit(linkage[near], amps[near], 4)
    grid = np.linspace(linkage[near][0], linkage[near][-1], 4000)
    at = grid[np.argmin(np.abs(cubic.deriv()(grid) - slope / 0.7))]
    assert float(cubic(at)) == pytest.approx(knee, rel=1e-2)


def with_offset_winding(mapping, **part):
    """Part 1 with 12 turns and an offset winding of 6, pulse path and offset path closed, bank at 12 V."""
    mapping["parts"]["1"] |= {"turns": 12.0, "offset_turns": 6.0, **part}
    mapping["bench"]["multiplexer"] = {
        "parts": {1: 101, 2: 102},
        "paths": {"pulse": 201, "bias": 202, "resistance": 203, "offset": 204},
    }
    world = World(WorldSpec.from_mapping(mapping))
    world.move_relays((101, 201, 204))
    world.set_supply(on=True, voltage=12.0, limit=1.0)
    world.advance(2.0)
    return world


def test_an_offset_field_adds_its_ampere_turns_over_the_turns_of_the_part(mapping):
    """6 turns with 8 A are 4 A of a winding of 12: a pulse goes on along the flux law from there, or away from it."""
    world = with_offset_winding(mapping)
    curve = world.parts[1].law.at(world.parts[1].temperature_degC)
    plain = world.fire(12e-6).shot.peak
    world.set_bias(on=True, current=8.0, voltage_limit=10.0)
    world.advance(5.0)
    with_it, against_it = world.fire(12e-6), world.fire(12e-6, polarity=-1)
    assert with_it.shot.peak > plain > against_it.shot.peak
    law, field = curve.still(), 6.0 / 12.0 * world.bias_current
    assert field == pytest.approx(4.0, rel=1e-3)
    for pulse, start in ((with_it, field), (against_it, -field)):
        shot = pulse.shot
        risen = float(law.flux(np.asarray(start + shot.peak)) - law.flux(np.asarray(start)))
        t = np.linspace(0.0, 12e-6, 6001)
        drive = shot.part_voltage(t) - shot.loop.winding * shot.motion(t)[0]
        assert float(np.trapezoid(drive[:-1], t[:-1])) == pytest.approx(
            risen, rel=1e-3
        )  # the last sample is off


def test_the_offset_winding_is_not_the_path_of_the_part(mapping):
    world = with_offset_winding(mapping)
    world.set_bias(on=True, current=8.0, voltage_limit=10.0)
    world.advance(5.0)
    ledger = world.ledger.as_mapping()
    assert ledger["offset_current"] == {"1": pytest.approx(8.0)}
    assert ledger["largest"]["part_current"]["1"] == 0.0
    assert ledger["paths_joined"] == 0
    assert ledger["relay_moves_under_current"] == 0
    world.move_relays(
        (101, 202, 204)
    )  # bias source on both windings, moved under current and on a charged bank
    ledger = world.ledger.as_mapping()
    assert (
        ledger["paths_joined"],
        ledger["relay_moves_under_current"],
        ledger["relay_moves_on_charged_bank"],
    ) == (1, 1, 1)


def test_an_offset_field_is_remembered_like_a_current_of_the_part(mapping):
    world = with_offset_winding(mapping, law="remanent", memory=0.15)
    part = world.parts[1]
    world.set_bias(on=True, current=8.0, voltage_limit=10.0)
    world.advance(5.0)
    written = part.law.at(part.temperature_degC).growing(0.0).offset_at(0.5 * world.bias_current)
    assert part.offset == pytest.approx(written, rel=1e-3)  # the winding warms the part meanwhile
    assert part.offset > 0
    world.set_bias(on=False, current=0.0, voltage_limit=10.0)
    assert part.offset == pytest.approx(written, rel=1e-3)  # the winding warms the part meanwhile


def test_a_part_without_an_offset_winding_is_open_to_the_bias_source(mapping):
    world = with_offset_winding(mapping, offset_turns=0.0)
    world.set_bias(on=True, current=8.0, voltage_limit=10.0)
    world.advance(5.0)
    assert world.bias_current == 0.0
    assert world.bias_voltage == 10.0
