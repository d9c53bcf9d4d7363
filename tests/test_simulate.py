"""The simulator against exact consequences of the Bloch equations and closed forms."""

import numpy as np
import pytest

import fidkit as fk
from fidkit.simulate import (
    Receiver,
    Sample,
    equilibrium,
    precess,
    pulse,
    record,
    simulate_fid,
    sphere_sample,
)

#: Rounding of a few double precision operations on numbers near one.
ROUNDING = 1e-12
#: The same on a phase of hundreds of turns, relative to the frequency.
FREQUENCY_ROUNDING = 1e-9


@pytest.mark.parametrize("phase", [0.0, 30.0, 90.0, 217.0])
def test_quarter_turn_leaves_nothing_longitudinal(phase):
    # Source: common practice, no source; exact consequence of the Bloch equations
    after = pulse(equilibrium(Sample([0.0], 0.8)), flip_angle=90, phase=phase)[0]
    assert abs(after[2]) < ROUNDING
    assert abs(np.hypot(after[0], after[1]) - 0.8) < ROUNDING


@pytest.mark.parametrize("phase", [0.0, 30.0, 90.0, 217.0])
def test_half_turn_reverses(phase):
    # Source: common practice, no source; exact consequence of the Bloch equations
    after = pulse(equilibrium(Sample([0.0], 0.8)), flip_angle=180, phase=phase)[0]
    assert abs(after[2] + 0.8) < ROUNDING
    assert np.hypot(after[0], after[1]) < ROUNDING


def test_frequency_stays_while_the_signal_fades():
    # Source: common practice, no source; exact consequence of the Bloch equations
    offset, t2 = 137.4, 0.05
    times = np.arange(2000) * 1e-4
    sample = Sample([offset], t1=1.0, t2=t2)
    signal = record(pulse(equilibrium(sample), flip_angle=90, phase=90), sample, times)
    assert abs(signal[-1]) < 0.02 * abs(signal[0])
    instantaneous = np.angle(signal[1:] * signal[:-1].conj()) / (2 * np.pi * 1e-4)
    assert np.abs(instantaneous / offset - 1).max() < FREQUENCY_ROUNDING
    trend = np.polyfit(times[:-1], instantaneous, 1)[0]
    assert abs(trend * times[-1]) < FREQUENCY_ROUNDING * offset
    turns = np.unwrap(np.angle(signal)) / (2 * np.pi)
    assert np.abs(turns - offset * times).max() < FREQUENCY_ROUNDING * turns[-1]


def test_relaxation_times_leave_each_other_alone():
    # Source: common practice, no source; exact consequence of the Bloch equations
    start = pulse(equilibrium(Sample([40.0])), flip_angle=63, phase=20)

    def after(t1, t2):
        vector = precess(start, Sample([40.0], t1=t1, t2=t2), 0.03)[0]
        return np.hypot(vector[0], vector[1]), vector[2]

    (across, along), (across_t1, along_t1), (across_t2, along_t2) = (
        after(0.5, 0.1),
        after(0.2, 0.1),
        after(0.5, 0.02),
    )
    assert abs(across_t1 - across) < ROUNDING
    assert abs(along_t2 - along) < ROUNDING
    assert abs(across - np.sin(np.deg2rad(63)) * np.exp(-0.03 / 0.1)) < ROUNDING
    assert abs(along - (1 - (1 - np.cos(np.deg2rad(63))) * np.exp(-0.03 / 0.5))) < ROUNDING
    assert abs(along_t1 - along) > 0.01
    assert abs(across_t2 - across) > 0.1


def test_precession_in_parts_is_precession_at_once():
    # closed form: the propagator of the Bloch equations is a semigroup
    sample = Sample([10.0, -20.0, 400.0], [1.0, 2.0, 0.5], t1=0.3, t2=0.07)
    start = pulse(equilibrium(sample), flip_angle=70, phase=5)
    parts = start
    for _ in range(10):
        parts = precess(parts, sample, 0.002)
    assert np.abs(parts - precess(start, sample, 0.02)).max() < ROUNDING


def test_off_resonance_pulse():
    # closed form: tilted effective field, longitudinal part
    # 1 - 2 (f1/fe)^2 sin^2(pi fe tau); Rabi's formula, Phys. Rev. 51, 652 (1937) (from memory)
    strength, offset, duration = 5e3, np.array([0.0, 2e3, -8e3]), 70e-6
    sample = Sample(offset, [1.0, 1.0, 1.0])
    after = pulse(
        equilibrium(sample),
        flip_angle=360 * strength * duration,
        duration=duration,
        offset=offset,
    )
    effective = np.hypot(strength, offset)
    wanted = 1 - 2 * (strength / effective * np.sin(np.pi * effective * duration)) ** 2
    assert np.abs(after[:, 2] - wanted).max() < ROUNDING
    assert np.abs(np.linalg.norm(after, axis=1) - 1).max() < ROUNDING


def test_pulse_turns_the_way_precession_does():
    # closed form: an infinitely weak pulse off resonance is free precession
    sample = Sample([123.0])
    start = np.array([[0.6, 0.0, 0.8]])
    turned = pulse(start, flip_angle=0, duration=0.004, offset=sample.offset)
    assert np.abs(turned - precess(start, sample, 0.004)).max() < ROUNDING


def test_uneven_pulse_strength():
    # closed form: sine and cosine of each flip angle
    sample = Sample([0.0, 0.0], [1.0, 1.0])
    after = pulse(equilibrium(sample), flip_angle=[30.0, 150.0], phase=90)
    wanted = [np.cos(np.deg2rad(30)), np.cos(np.deg2rad(150))]
    assert np.abs(after[:, 2] - wanted).max() < ROUNDING
    assert np.abs(after[:, 0] - 0.5).max() < ROUNDING


def test_gradient_over_a_sphere():
    # closed form: the projection of a ball is a parabola, its transform 3 (sin a - a cos a) / a^3
    linear, times = 25.0, np.linspace(0.002, 0.1, 200)
    sample = sphere_sample(offset=0.0, linear=linear, isochromats=20000)
    signal = record(pulse(equilibrium(sample), flip_angle=90, phase=90), sample, times)
    a = 2 * np.pi * linear * times
    #: Points spread evenly in three dimensions sum a smooth function to about 1/N.
    sampling = 1e-3
    assert np.abs(signal - 3 * (np.sin(a) - a * np.cos(a)) / a**3).max() < sampling


def test_simulated_fid_is_a_record():
    fid = simulate_fid(
        Sample([137.4], 2.0, t2=0.05),
        points=512,
        dwell_time=1e-4,
        carrier_frequency=63.87e6,
        dead_time=3e-4,
        pulse_duration=1e-4,
        units="V",
        coil="loop 40 mm",
    )
    # closed form, first order in the turn during the pulse: a quarter turn of finite length counts
    # as 2/pi of its length of free precession, and half of it is counted from the middle on
    turn = 2 * np.pi * 137.4 * 1e-4
    at_zero = fid.values[0] * np.exp(-2j * np.pi * 137.4 * 3e-4)
    assert abs(np.angle(at_zero) - turn * (2 / np.pi - 1 / 2)) < turn**3
    assert fid.time.values[0] == 3e-4
    assert fid.attrs["units"] == "V"
    assert fid.attrs["coil"] == "loop 40 mm"


def test_receiver():
    # closed forms of each imperfection
    at = np.arange(4000) * 2.5e-4
    quiet = np.zeros(at.size, dtype=complex)
    random = np.random.default_rng(1)
    noisy = Receiver(noise=0.3)(quiet, at, random)
    #: Five standard errors of a standard deviation of 8000 numbers.
    counting = 5 / np.sqrt(2 * 8000)
    assert abs(np.std(noisy.view(float)) / 0.3 - 1) < counting
    assert np.all(Receiver(offset=0.1 - 0.2j)(quiet, at) == 0.1 - 0.2j)
    hum = np.fft.fft(Receiver(mains=0.5)(quiet, at, random).real) / at.size
    assert abs(abs(hum[50]) - 0.25) < ROUNDING
    assert abs(abs(hum[150]) - 0.25 / 3) < ROUNDING
    tone = np.exp(2j * np.pi * 100 * at)
    lopsided = np.fft.fft(Receiver(gain_imbalance=0.1)(tone, at)) / at.size
    assert abs(lopsided[-100] + 0.05) < ROUNDING  # image = -gain_imbalance / 2
    stepped = Receiver(digitizer_step=0.25)(tone, at).view(float)
    assert set(np.unique(stepped)) <= set(np.arange(-4, 5) * 0.25)
    assert np.abs(stepped - tone.view(float)).max() <= 0.125


def test_the_same_seed_gives_the_same_record():
    def once(seed):
        return simulate_fid(
            Sample([10.0], t2=0.1),
            points=64,
            dwell_time=1e-3,
            carrier_frequency=63.87e6,
            receiver=Receiver(noise=0.1, mains=0.01),
            seed=seed,
        ).values

    assert np.array_equal(once(3), once(3))
    assert not np.array_equal(once(3), once(4))


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"dead_time": 1e-6, "pulse_duration": 1e-4}, "dead_time must reach past the pulse"),
        ({"receiver": Receiver(noise=1.0)}, "give a seed"),
        ({"dwell_time": -1.0}, "dwell_time must be a positive number"),
        ({"nucleus": "7H"}, "nucleus must be one of"),
    ],
)
def test_mistakes_are_said(change, said):
    given = {"points": 64, "dwell_time": 1e-3, "carrier_frequency": 63.87e6, **change}
    with pytest.raises(fk.FidkitError, match=said):
        simulate_fid(Sample([10.0]), **given)


def test_samples_are_checked():
    with pytest.raises(fk.FidkitError, match="weight must be one number or one for each offset"):
        Sample([1.0, 2.0], [1.0, 2.0, 3.0])
    with pytest.raises(fk.FidkitError, match="t2 must be above 0 s"):
        Sample([1.0], t2=0)
