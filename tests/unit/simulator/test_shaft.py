"""Orders of a shaft: their velocity is what was asked for."""

import numpy as np
import pytest
from numpy.typing import NDArray

from humbell.model import STANDARD_GRAVITY
from humbell_sim.parts import Order, Part, ShaftOrders
from humbell_sim.rendering import Renderer

RATE_HZ = 51_200.0
SECOND = 51_200


def acceleration(part: Part, start_s: float = 0.0) -> NDArray[np.float64]:
    """Return one second of a part alone, m/s²."""
    samples = Renderer([[part]], RATE_HZ).render(round(start_s * RATE_HZ), SECOND)[0]
    return np.asarray(samples, dtype=np.float64) * STANDARD_GRAVITY


def velocity_lines(signal: NDArray[np.float64]) -> NDArray[np.float64]:
    """
    Return the RMS velocity, mm/s, of each line of one second's spectrum; line k is at k Hz.

    Integrated in the frequency domain: V(f) = A(f) / (j 2 pi f), by the derivative theorem (Bracewell, The Fourier
    Transform and Its Applications, chapter 6; from memory). Whole periods in the second, so no window is needed.
    """
    spectrum = np.fft.rfft(signal) / len(signal)
    frequency_hz = np.fft.rfftfreq(len(signal), 1 / RATE_HZ)
    velocity = np.zeros_like(spectrum)  # no constant speed: the machine stays where it is
    velocity[1:] = spectrum[1:] / (2j * np.pi * frequency_hz[1:])
    return np.asarray(np.sqrt(2) * np.abs(velocity) * 1000)


@pytest.mark.parametrize("start_s", [0.0, 3.7, 86_400.0 * 365])
@pytest.mark.parametrize(("shaft_hz", "multiple"), [(25.0, 1.0), (25.0, 2.0), (50.0, 0.5), (50.0, 1.5), (10.0, 7.0)])
def test_an_order_has_the_velocity_asked_for(shaft_hz: float, multiple: float, start_s: float) -> None:
    """The numerically integrated line meets the closed form to 1e-6, float32's own step, even after a year."""
    part = ShaftOrders(shaft_hz, (Order(multiple, 2.8, phase_deg=33),))
    lines = velocity_lines(acceleration(part, start_s))
    line_hz = round(shaft_hz * multiple)
    assert lines[line_hz] == pytest.approx(2.8, rel=1e-6)
    assert np.delete(lines, line_hz).max() < 1e-5


def test_an_order_begins_at_its_phase() -> None:
    """a(t) = sqrt(2) 2 pi f v cos(2 pi f t + phase), the acceleration of a sine of velocity v RMS; common practice."""
    signal = acceleration(ShaftOrders(25.0, (Order(1, 1.0, phase_deg=60),)))
    time_s = np.arange(SECOND) / RATE_HZ
    expected = np.sqrt(2) * 2 * np.pi * 25 / 1000 * np.cos(2 * np.pi * 25 * time_s + np.pi / 3)
    np.testing.assert_allclose(signal, expected, atol=1e-6)


def test_orders_add_up() -> None:
    """Lines at several multiples keep their velocities beside each other."""
    orders = (Order(1, 1.9), Order(0.5, 0.4, phase_deg=80), Order(3, 0.2, phase_deg=200))
    lines = velocity_lines(acceleration(ShaftOrders(50.0, orders)))
    for order in orders:
        assert lines[round(50 * order.multiple)] == pytest.approx(order.velocity_mm_s, rel=1e-5)


@pytest.mark.parametrize("start_s", [0.0, 12.3, 60.0])
def test_an_order_grows_by_the_second(start_s: float) -> None:
    """
    The line's velocity over a second is that of its middle, v + g (t + 1/2 s).

    So it is for a linear ramp over whole periods: its odd part about the middle adds only a quadrature component, of
    g / (2 pi) times terms below g / f.
    """
    lines = velocity_lines(acceleration(ShaftOrders(50.0, (Order(1, 1.9, 0.06),)), start_s))
    assert lines[50] == pytest.approx(1.9 + 0.06 * (start_s + 0.5), rel=1e-4)


def test_a_falling_order_ends_at_nothing() -> None:
    """A velocity never falls below 0, where it would turn its phase and grow again."""
    part = ShaftOrders(50.0, (Order(1, 1.0, -0.5),))
    assert velocity_lines(acceleration(part, 1.0))[50] == pytest.approx(0.25, rel=1e-3)
    assert np.all(acceleration(part, 2.0) == 0)
