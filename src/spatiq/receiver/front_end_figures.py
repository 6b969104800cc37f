"""What residuals say of the receiver's front end: image, constant, correlation in time.

A receive channel whose I and Q branches differ adds c conj(s) to its samples s, and its mixer a
constant d (M. Valkama, M. Renfors, V. Koivunen, "Advanced methods for I/Q imbalance compensation in
communication receivers", IEEE Trans. Signal Process. 49(10), 2001; from memory). Both are linear in
the received vectors once the words are known, so that least squares jointly with the channel is
maximum likelihood: with e = y - H x left by the refit,

    e_k = c conj(H x_k) u_k^2 + d G u_k + noise,    u_k = exp(-j theta_k)

outside of the space that x spans, theta_k being the angle by which period k has been turned back
and G the matched filter's gain at the place of zero frequency. Where the image cannot be told from
the signal (a real constellation without carrier offset), it only changes the channel: harmless, and
missing here.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.front_end_kernels import LAGS, Sums
from spatiq.receiver.matched_filter import FilterBank
from spatiq.signal.pulses import Pulse, symbol_response

# Share of a regressor's energy that must lie outside of what the channel explains.
_TOLD_APART = 0.01


@dataclass(frozen=True, eq=False)
class FrontEndSums:
    """Sums of `residual_sums` for F frames, frames first."""

    ex: NDArray[np.complex128]
    eimage: NDArray[np.complex128]
    turned: NDArray[np.complex128]
    gram: NDArray[np.complex128]
    econstant: NDArray[np.complex128]
    xconstant: NDArray[np.complex128]
    lagged: NDArray[np.complex128]

    def of(self, i: int) -> Sums:
        """Sums of frame i, as the kernel takes them."""
        return (
            self.ex[i],
            self.eimage[i],
            self.turned[i],
            self.gram[i],
            self.econstant[i],
            self.xconstant[i],
            self.lagged[i],
        )

    def only(self, frames: slice) -> FrontEndSums:
        """Some frames, sharing memory."""
        return FrontEndSums(*(part[frames] for part in vars(self).values()))


def empty_sums(count: int, channels: int, antennas: int) -> FrontEndSums:
    """Room for the sums of `count` frames."""

    def room(*shape: int) -> NDArray[np.complex128]:
        return np.zeros((count, *shape), np.complex128)

    return FrontEndSums(
        ex=room(channels, antennas),
        eimage=room(channels, antennas),
        turned=room(antennas, antennas),
        gram=room(antennas, antennas),
        econstant=room(channels),
        xconstant=room(antennas),
        lagged=room(channels, LAGS + 1),
    )


@dataclass(frozen=True, eq=False)
class FrontEndFigures:
    """Estimates of F frames, each receive channel apart; NaN where they cannot be told.

    Attributes:
        image: complex128 (F, Nr); c = K2 / conj(K1), what the front end adds as conj of the signal.
        image_var: float64 (F, Nr); its variance.
        constant: complex128 (F, Nr); d, in the samples' scale.
        constant_var: float64 (F, Nr); its variance.
        correlation: complex128 (F, LAGS); correlation of the residuals 1, 2, ... symbol periods
            apart, mean over the receive channels.
        correlation_score: float64 (F,); Gamma(LAGS) distributed in white noise on one channel; of
            the channel where it is largest.
        image_taken, constant_taken: complex128 (F, Nr); what of them was taken out of the frame.
    """

    image: NDArray[np.complex128]
    image_var: NDArray[np.float64]
    constant: NDArray[np.complex128]
    constant_var: NDArray[np.float64]
    correlation: NDArray[np.complex128]
    correlation_score: NDArray[np.float64]
    image_taken: NDArray[np.complex128]
    constant_taken: NDArray[np.complex128]

    def only(self, frames: slice) -> FrontEndFigures:
        """Some frames, sharing memory."""
        return FrontEndFigures(*(part[frames] for part in vars(self).values()))

    def beyond(
        self, image: NDArray[np.complex128], constant: NDArray[np.complex128]
    ) -> FrontEndFigures:
        """Figures of the samples as they came, of which `image` and `constant` were taken out."""
        return replace(
            self,
            image_taken=image,
            constant_taken=constant,
            image=(image + self.image) / (1.0 + image.conj() * self.image),
            constant=constant + self.constant + image * self.constant.conj(),
        )

    def enter(self, i: int, one: FrontEndFigures) -> None:
        """Enter the figures of one frame as frame i."""
        for name, part in vars(self).items():
            part[i] = getattr(one, name)[0]


def solve_sums(
    sums: FrontEndSums,
    channel: NDArray[np.complex128],
    noise: NDArray[np.float64],
    periods: int,
    gain: NDArray[np.float64],
    expected: NDArray[np.float64],
) -> FrontEndFigures:
    """Least squares for image and constant of each channel, the transmit channel projected out.

    Args:
        sums: of F frames.
        channel: complex128 (F, Nr, Nt).
        noise: float64 (F,); N0.
        periods: active symbol periods of a frame, Ka.
        gain: float64 (F,); G.
        expected: float64 (LAGS,); what the matched filter makes of white noise: its own correlation
            at whole symbol periods, 0 for a Nyquist pulse.
    """
    scale = np.maximum(np.einsum("faa->fa", sums.gram).real.max(axis=1), 1e-300)
    # Antennas that are never used have no energy: anything on the diagonal leaves them out.
    firm = sums.gram + 1e-9 * scale[:, None, None] * np.eye(channel.shape[2])
    image_x = np.einsum("fba,fra->frb", sums.turned, channel.conj())  # X^H z
    constant_x = np.broadcast_to(sums.xconstant[:, None], image_x.shape)  # X^H u
    sides = np.stack([image_x, constant_x, sums.ex], axis=-1)  # (F, Nr, Nt, 3)
    solved = np.linalg.solve(firm[:, None], sides)
    inner = np.einsum("frap,fraq->frpq", sides.conj(), solved)
    image_energy = np.einsum("fra,fab,frb->fr", channel.conj(), sums.gram, channel).real
    between = np.einsum("fra,fa->fr", channel, sums.xconstant.conj())  # z^H u
    zz = image_energy - inner[..., 0, 0].real
    uu = periods - inner[..., 1, 1].real
    zu = between - inner[..., 0, 1]
    ze = np.einsum("fra,fra->fr", channel, sums.eimage) - inner[..., 0, 2]
    ue = sums.econstant - inner[..., 1, 2]
    whole = np.full_like(uu, periods)
    own_image, own_constant = zz > _TOLD_APART * image_energy, uu > _TOLD_APART * whole
    image, image_var = _first_of_two((zz, ze), (uu, ue), zu, image_energy, own_constant)
    constant, constant_var = _first_of_two((uu, ue), (zz, ze), zu.conj(), whole, own_image)
    level = noise[:, None]
    correlation, score = correlation_over_time(sums.lagged, periods, expected)
    return FrontEndFigures(
        image=image,
        image_var=image_var * level,
        constant=constant / gain[:, None],
        constant_var=constant_var * level / gain[:, None] ** 2,
        correlation=correlation,
        correlation_score=score,
        image_taken=np.zeros_like(image),
        constant_taken=np.zeros_like(constant),
    )


def _first_of_two(
    first: tuple[NDArray[np.float64], NDArray[np.complex128]],
    second: tuple[NDArray[np.float64], NDArray[np.complex128]],
    between: NDArray[np.complex128],
    whole: NDArray[np.float64],
    with_second: NDArray[np.bool_],
) -> tuple[NDArray[np.complex128], NDArray[np.float64]]:
    """First coefficient of a least-squares fit of two regressors, and its variance over N0.

    Each regressor: its energy, its product with e. Missing where less than a hundredth of the first
    one's `whole` energy is its own; a second one that the channel explains takes no part.
    """
    share = np.where(with_second, between / np.where(with_second, second[0], 1.0), 0.0)
    own = first[0] - (share * between.conj()).real
    told = own > _TOLD_APART * whole
    energy = np.where(told, own, 1.0)
    value = np.where(told, (first[1] - share * second[1]) / energy, np.nan)
    return value, np.where(told, 1.0 / energy, np.nan)


def correlation_over_time(
    lagged: NDArray[np.complex128], periods: int, expected: NDArray[np.float64]
) -> tuple[NDArray[np.complex128], NDArray[np.float64]]:
    """Correlation over time (F, LAGS), and the score (F,) of the channel that shows it most.

    In white noise the squared correlation at a lag, times the periods, is exponentially distributed
    with mean 1 in long frames (M. S. Bartlett, J. R. Statist. Soc. Suppl. 8(1), 1946).
    """
    power = lagged[..., :1].real
    alive = power > 0
    each = lagged[..., 1:] / np.where(alive, power, 1.0)
    count = np.maximum(alive.sum(axis=1), 1)
    left = np.abs(each - np.where(alive, expected, 0.0)) ** 2
    return each.sum(axis=1) / count, periods * np.sum(left, axis=2).max(axis=1)


def forget_frame(figures: FrontEndFigures, i: int) -> None:
    """Figures of a frame that could not be measured: missing, and nothing taken out."""
    for values in (figures.image, figures.image_var, figures.constant, figures.constant_var):
        values[i] = np.nan
    figures.correlation[i] = np.nan
    figures.correlation_score[i] = 0.0
    figures.image_taken[i] = 0.0
    figures.constant_taken[i] = 0.0


def filter_gain(bank: FilterBank, frequency: NDArray[np.float64]) -> NDArray[np.float64]:
    """Gain of the matched filter at frequencies (F,) in cycles per sample."""
    instants = np.arange(bank.taps.shape[1]) - (bank.half - 1)
    turned = np.cos(2 * np.pi * np.multiply.outer(frequency, instants))
    return np.asarray(turned @ bank.taps[0].astype(np.float64))


def expected_correlation(pulse: Pulse, samples_per_symbol: float) -> NDArray[np.float64]:
    """Correlation (LAGS,) of white noise 1, 2, ... symbol periods apart, after the matched filter.

    The pulse's own at whole symbol periods: 0 for a Nyquist pulse.
    """
    response = symbol_response(pulse, samples_per_symbol)
    centre = response.size // 2
    beyond = np.zeros(LAGS)
    known = response[centre + 1 : centre + 1 + LAGS]
    beyond[: known.size] = known / response[centre]
    return beyond
