"""Time courses: haemodynamic latent signals, head motion, smooth noise, and a run made of them."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter
from scipy.signal import fftconvolve

from seedaudit.synth.atlas import AMPLITUDES, BASELINE, GREY, Brain, nearest_correlation
from seedaudit.synth.settings import SynthSettings

Floats = NDArray[np.float64]

MOTION = ("trans_x", "trans_y", "trans_z", "rot_x", "rot_y", "rot_z")
UNIT = 0.015 * BASELINE[GREY]  # SD of a network's signal: 1.5 per cent of the baseline
HEAD_RADIUS = 50.0  # mm
NOISE_MEMORY = 0.35  # lag-1 autocorrelation of the voxel noise
STEP = 0.25  # s, at which latent signals are made before they are sampled


def haemodynamic_response(times: Floats) -> Floats:
    """Double-gamma haemodynamic response, peak about 1.

    Glover G.H. (1999) NeuroImage 9:416-429: two terms t^n exp(-t/d), each scaled to a peak of 1,
    with n 6 and 12, d 0.9 s, and the second subtracted with weight 0.35.

    Parameters
    ----------
    times : (T,) array
        s, not negative.
    """

    def term(power: float, scale: float) -> Floats:
        ratio = times / (power * scale)
        return np.asarray(ratio**power * np.exp(power * (1 - ratio)))

    return term(6, 0.9) - 0.35 * term(12, 0.9)


def latent_series(
    rng: np.random.Generator, correlation: Floats, volumes: int, repetition_time: float
) -> Floats:
    """Draw correlated white noise, convolve it with the haemodynamic response, and sample it.

    Parameters
    ----------
    rng : numpy.random.Generator
    correlation : (K, K) array
    volumes : int
    repetition_time : float
        s.

    Returns
    -------
    (T, K) array
        Expected variance 1.
    """
    response = haemodynamic_response(np.arange(0, 32, STEP))
    samples = np.round(np.arange(volumes) * repetition_time / STEP).astype(int)
    values, vectors = np.linalg.eigh(correlation)
    white = rng.standard_normal((samples[-1] + len(response), len(correlation)))
    mixed = white @ (vectors * np.sqrt(values)).T
    smooth = fftconvolve(mixed, response[:, None] / np.linalg.norm(response), mode="valid", axes=0)
    return np.asarray(smooth[samples])


def personal_coupling(rng: np.random.Generator, planted: Floats, sd: float) -> Floats:
    """Vary planted correlations by normal noise of `sd` on the Fisher z scale.

    Parameters
    ----------
    rng : numpy.random.Generator
    planted : (K, K) array
    sd : float
    """
    upper = np.triu_indices(len(planted), 1)
    varied = np.eye(len(planted))
    varied[upper] = np.tanh(np.arctanh(planted[upper]) + sd * rng.standard_normal(len(upper[0])))
    return nearest_correlation(varied + varied.T - np.eye(len(planted)))


def head_motion(rng: np.random.Generator, volumes: int) -> Floats:
    """Draw six motion parameters: a random walk, and jerks that come and go within two volumes.

    Parameters
    ----------
    rng : numpy.random.Generator
    volumes : int

    Returns
    -------
    (T, 6) array
        Translations in mm, rotations in radian.
    """
    scale = np.array([1, 1, 1, 1 / HEAD_RADIUS, 1 / HEAD_RADIUS, 1 / HEAD_RADIUS])
    restlessness = rng.lognormal(sigma=0.3)
    walk = np.cumsum(0.015 * restlessness * rng.standard_normal((volumes, 6)), axis=0)
    for start in np.flatnonzero(rng.random(volumes) < 0.015):
        walk[start : start + 2] += 0.12 * restlessness * rng.standard_normal(6)
    return np.asarray(walk * scale)


def framewise_displacement(motion: Floats) -> Floats:
    """Sum of absolute changes of the six parameters, rotations on a 50 mm sphere.

    Power J.D. et al. (2012) NeuroImage 59:2142-2154.

    Parameters
    ----------
    motion : (T, 6) array
        mm and radian.

    Returns
    -------
    (T,) array
        mm; NaN at the first volume, which has no change.
    """
    change = np.abs(np.diff(motion, axis=0))
    travelled = change[:, :3].sum(axis=1) + HEAD_RADIUS * change[:, 3:].sum(axis=1)
    return np.concatenate([[np.nan], travelled])


class SmoothNoise:
    """Volumes of unit-variance noise, smooth in space and first-order autoregressive in time.

    Parameters
    ----------
    rng : numpy.random.Generator
    brain : Brain
    fwhm : float
        mm.
    """

    def __init__(self, rng: np.random.Generator, brain: Brain, fwhm: float = 5.0) -> None:
        self._rng, self._where = rng, tuple(brain.voxels.ijk.T)
        self._shape = brain.voxels.grid.shape
        self._sigma = fwhm / np.sqrt(8 * np.log(2)) / brain.voxels.grid.voxel_sizes
        impulse = np.zeros(self._shape, dtype=np.float32)
        impulse[tuple(size // 2 for size in self._shape)] = 1
        self._norm = np.linalg.norm(gaussian_filter(impulse, self._sigma, mode="wrap"))
        self._last = self._fresh()

    def _fresh(self) -> NDArray[np.float32]:
        white = self._rng.standard_normal(self._shape, dtype=np.float32)
        # Wrapping keeps the variance the same at the faces of the volume.
        return np.asarray(
            gaussian_filter(white, self._sigma, mode="wrap")[self._where] / self._norm
        )

    def next(self) -> NDArray[np.float32]:
        """Give the next volume's values in the brain, (V,)."""
        fresh = np.float32(np.sqrt(1 - NOISE_MEMORY**2)) * self._fresh()
        self._last = np.float32(NOISE_MEMORY) * self._last + fresh
        return self._last


def simulate_run(
    rng: np.random.Generator,
    brain: Brain,
    loads: NDArray[np.float32],
    correlation: Floats,
    settings: SynthSettings,
) -> tuple[NDArray[np.int16], pd.DataFrame]:
    """Make one run, volume by volume, and its confounds.

    Signal = baseline + networks + head motion at edges + a shared nuisance signal (twice as strong
    in the ventricles) + smooth noise that grows with framewise displacement.

    Parameters
    ----------
    rng : numpy.random.Generator
    brain : Brain
    loads : (V, K) array
        Share of each voxel in each network, 0 to 1.
    correlation : (K, K) array
        Of the latent signals.
    settings : SynthSettings

    Returns
    -------
    stored : (i, j, k, T) int16 array
    confounds : pandas.DataFrame
        T rows.
    """
    volumes, repetition_time = settings.volumes, settings.repetition_time
    strength = settings.leak * UNIT
    latent = latent_series(rng, correlation, volumes, repetition_time) * AMPLITUDES * UNIT
    nuisance = latent_series(rng, np.eye(1), volumes, repetition_time)[:, 0] * strength
    drift = rng.normal(0, 1.5, brain.baseline.shape) * strength
    motion = head_motion(rng, volumes)
    displacement = framewise_displacement(motion)
    burst = settings.noise * UNIT * (1 + settings.leak * np.nan_to_num(displacement))
    noises = SmoothNoise(rng, brain)
    where = tuple(brain.voxels.ijk.T)
    stored = np.zeros((*brain.voxels.grid.shape, volumes), dtype=np.int16, order="F")
    csf, whole = np.empty(volumes), np.empty(volumes)
    for t in range(volumes):
        signal = brain.baseline + loads @ latent[t] + burst[t] * noises.next()
        signal += 0.5 * settings.leak * (brain.motion @ motion[t])
        signal += nuisance[t] * (1.0 + brain.ventricle) + drift * (t / volumes - 0.5)
        csf[t], whole[t] = signal[brain.ventricle].mean(), signal.mean()
        stored[..., t][where] = np.round(signal / settings.quantum)
    table = pd.DataFrame(motion, columns=list(MOTION))
    derivatives = table.diff().add_suffix("_derivative")
    table["csf"], table["global_signal"] = csf, whole
    table["framewise_displacement"] = displacement
    return stored, pd.concat([table, derivatives], axis=1)
