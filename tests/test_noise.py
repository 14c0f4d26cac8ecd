"""Slow and colored noise against published averages, filter functions and brute force."""

import numpy as np
import pytest

from shaper import rotation
from shaper.errors import InputError
from shaper.physics import noise
from shaper.physics.propagate import propagate
from shaper.target import Target, infidelity

PUBLISHED = 1e-9  # relative; the tables carry ten digits or more
PROCESS = 1.5  # infidelity of the tables (1 - F_pro) per average gate infidelity


def pulses(*angle_phase):
    """Segments at unit Rabi rate from (angle, phase) in rad."""
    drive = np.array([[np.cos(phase), np.sin(phase)] for _, phase in angle_phase])
    return drive, np.array([angle for angle, _ in angle_phase])


def corpse(theta):
    k = np.arcsin(np.sin(theta / 2) / 2)
    return pulses((2 * np.pi + theta / 2 - k, 0), (2 * np.pi - 2 * k, np.pi), (theta / 2 - k, 0))


def short_corpse(theta):
    k = np.arcsin(np.sin(theta / 2) / 2)
    return pulses((theta / 2 - k, 0), (2 * np.pi - 2 * k, np.pi), (theta / 2 - k, 0))


def sandwich(theta):
    return pulses((np.pi / 2, np.pi / 2), (theta, 0), (np.pi / 2, -np.pi / 2))


QUARTER, HALF = np.pi / 2, np.pi
X90, X180 = Target(rotation.about_x(QUARTER)), Target(rotation.about_x(HALF))


# mean of 1 - F_pro over detuning/Rabi ~ N(0, sigma): 80-node rule checked against direct
# quadrature to 1e-25, outside the project, at sigma = 0.01, 0.02, 0.05, 0.1
@pytest.mark.parametrize(
    ("pulse", "target", "means"),
    [
        (
            pulses((HALF, 0)),
            X180,
            (9.9988506629e-05, 0.000399816159844, 0.00249283342023, 0.00988616678305),
        ),
        (
            corpse(HALF),
            X180,
            (3.42902243176e-10, 1.25539824143e-08, 2.37330269844e-06, 0.000134736159646),
        ),
        (
            short_corpse(QUARTER),
            X90,
            (7.57794264056e-08, 1.21154533071e-06, 4.70687062247e-05, 0.000737532660046),
        ),
        (
            sandwich(QUARTER),
            Target(rotation.about_z(QUARTER)),
            (0.000299891749638, 0.00119826931744, 0.00743275529966, 0.0289442713093),
        ),
    ],
)
def test_published_quasi_static_means(pulse, target, means):
    for sigma, mean in zip((0.01, 0.02, 0.05, 0.1), means, strict=True):
        ours = noise.quasi_static_infidelity(*pulse, target, sigma)
        assert PROCESS * ours == pytest.approx(mean, rel=PUBLISHED)


# |int R^T z e^(iwt) dt|^2 at unit Rabi rate, computed outside the project, w = 0 .. 1
@pytest.mark.parametrize(
    ("pulse", "values"),
    [
        (pulses((HALF, 0)), (4, 4.00021302465, 4.02115515041, 4.44444444444, 4.93480220054)),
        (corpse(HALF), (0, 0.0161937765777, 1.56060161561, 28.6740713326, 38.942071864)),
        (short_corpse(HALF), (0, 0.0122498853224, 1.20161769006, 18.8495745475, 18.6336939745)),
        (
            sandwich(QUARTER),
            (12, 11.9982945443, 11.8310397226, 8.62853936105, 5.09770642389),
        ),
    ],
)
def test_published_filter_functions(pulse, values):
    omega = np.array([0, 0.01, 0.1, 0.5, 1.0])
    assert noise.filter_function(*pulse, omega) == pytest.approx(values, rel=1e-10, abs=1e-25)


@pytest.mark.parametrize("kind", noise.KINDS)
@pytest.mark.parametrize("omega", [0.0, 0.31, 2.2])
def test_filter_function_predicts_a_weak_tone(kind, omega):
    """Brute force: a weak cosine error on a fine grid, mean over its phase."""
    drive, durations = sandwich(QUARTER)
    target = Target(rotation.about_z(QUARTER))
    fine = 600  # divides the three equal segments evenly
    times = (np.arange(fine) + 0.5) * np.sum(durations) / fine
    index = np.searchsorted(np.cumsum(durations), times)
    weak, phases = 1e-4, np.linspace(0, 2 * np.pi, 8, endpoint=False)
    lost = []
    for phase in phases:
        tone = weak * np.cos(omega * times + phase)
        q = np.array([1.0, 0, 0, 0])
        step = np.full(1, np.sum(durations) / fine)
        for n, error in enumerate(tone):
            eps, delta = (error, 0.0) if kind == "amplitude" else (0.0, error)
            q = rotation.product(propagate(drive[index[n], None], step, eps, delta), q)
        lost.append(infidelity(q, target))
    expected = weak**2 / 2 / 6 * noise.filter_function(drive, durations, [omega], kind=kind)[0]
    assert np.mean(lost) == pytest.approx(expected, rel=5e-3)  # second order and 600 steps


def test_white_noise_costs_the_dephasing_time():
    """White detuning noise of one-sided density S dephases at S/4: lost = t/(3 Tphi)."""
    duration, density = 50e-9, 1e3
    spectrum = noise.power_law(density, 1.0, 0.0, 1.0, 20e9)
    still = noise.colored_infidelity(np.zeros((1, 2)), np.array([duration]), spectrum)
    assert still == pytest.approx(duration * density / 4 / 3, rel=2e-2)  # cut at 20 GHz


def test_slow_noise_is_quasi_static():
    """A spectrum far below 1/T with variance sigma^2 equals the quasi-static average."""
    drive, durations = pulses((HALF, 0))
    spectrum = noise.power_law(1.0, 1e-5, 0.0, 1e-6, 1e-5)
    sigma = np.sqrt(1.0 * (1e-5 - 1e-6))
    ours = noise.colored_infidelity(drive, durations, spectrum)
    assert ours == pytest.approx(
        noise.quasi_static_infidelity(drive, durations, X180, sigma), rel=5e-4
    )


def test_spectrum_file(tmp_path):
    path = tmp_path / "psd.csv"
    path.write_text("frequency_Hz,density\n1e3,4.0\n1e5,0.04\n")
    spectrum = noise.read_spectrum(path, unit=2.0)
    assert spectrum.at(np.array([1e4, 2e5])) == pytest.approx([0.8, 0.0])
    for text, match in (
        ("f,s\n1,2\nx,3\n", "row 3: expected two numbers"),
        ("f,s\n2,2\n1,3\n", "positive and rise"),
        ("f,s\n1,2\n2,-3\n", "densities"),
        ("f,s\n", "at least 2 rows"),
    ):
        path.write_text(text)
        with pytest.raises(InputError, match=match):
            noise.read_spectrum(path)
    with pytest.raises(InputError, match="cannot read"):
        noise.read_spectrum(tmp_path / "absent.csv")
    with pytest.raises(InputError, match="lowest"):
        noise.power_law(1.0, 1.0, 1.0, 5.0, 2.0)
    with pytest.raises(ValueError, match="kind"):
        noise.filter_function(*pulses((1.0, 0)), [0.0], kind="phase")
