"""Cerebral patterns that artifacts are mistaken for: what a flag must not sweep away.

Each pattern is put by cortical patches (``patterns``) into otherwise silent potentials.
``amplitude_uv`` is the largest absolute value at the strongest site.
"""

from __future__ import annotations

from artifactlens.simulation.lookalikes_epileptic import (
    focal_spike,
    frontal_delta,
    paroxysmal_fast,
    polyspike,
    seizure_fast,
    spike_and_wave,
)
from artifactlens.simulation.lookalikes_rhythms import (
    breach,
    lambda_wave,
    medication_beta,
    mu,
    photic_driving,
    sharp_alpha,
    temporal_theta,
    wicket,
)
from artifactlens.simulation.lookalikes_sleep import (
    fourteen_six,
    frontal_spindle,
    hypnagogic_bursts,
    k_complex,
    slow_waves,
    spindle,
    vertex_wave,
)
from artifactlens.simulation.lookalikes_young import (
    childhood_slowing,
    drowsy_rhythm,
    infant_background,
    posterior_slow_waves,
)
from artifactlens.simulation.patterns import LookAlike

LOOK_ALIKES: dict[str, LookAlike] = {
    "frontal_delta": LookAlike(frontal_delta, (2.0, 6.0), (60.0, 180.0), "eye"),
    "slow_waves": LookAlike(slow_waves, (4.0, 20.0), (80.0, 250.0), "eye"),
    "spike_and_wave": LookAlike(spike_and_wave, (2.0, 12.0), (100.0, 350.0), "eye"),
    "polyspike": LookAlike(polyspike, (0.7, 4.0), (80.0, 300.0), "eye"),
    "k_complex": LookAlike(k_complex, (0.6, 1.1), (75.0, 200.0), "eye"),
    "hypnagogic_bursts": LookAlike(hypnagogic_bursts, (1.5, 8.0), (100.0, 350.0), "eye"),
    "posterior_slow_waves": LookAlike(
        posterior_slow_waves, (3.0, 20.0), (60.0, 200.0), "eye"
    ),
    "childhood_slowing": LookAlike(childhood_slowing, (6.0, 60.0), (60.0, 200.0), "eye"),
    "drowsy_rhythm": LookAlike(drowsy_rhythm, (3.0, 20.0), (60.0, 200.0), "eye"),
    "infant_background": LookAlike(infant_background, (15.0, 60.0), (50.0, 300.0), "eye"),
    "lambda_wave": LookAlike(lambda_wave, (2.0, 8.0), (20.0, 60.0), "eye"),
    "temporal_theta": LookAlike(temporal_theta, (2.0, 10.0), (40.0, 120.0), "eye"),
    "vertex_wave": LookAlike(vertex_wave, (0.15, 0.25), (50.0, 150.0), "pop"),
    "vertex_run": LookAlike(vertex_wave, (1.0, 5.0), (50.0, 200.0), "eye"),
    "focal_spike": LookAlike(focal_spike, (0.25, 0.5), (50.0, 200.0), "pop"),
    "single_wicket": LookAlike(wicket, (0.09, 0.17), (60.0, 210.0), "pop"),
    "wicket": LookAlike(wicket, (0.4, 2.5), (60.0, 200.0), "muscle"),
    "spindle": LookAlike(spindle, (0.5, 2.0), (20.0, 60.0), "muscle"),
    "frontal_spindle": LookAlike(frontal_spindle, (0.5, 2.0), (20.0, 60.0), "muscle"),
    "medication_beta": LookAlike(medication_beta, (4.0, 60.0), (20.0, 60.0), "muscle"),
    "mu": LookAlike(mu, (1.0, 4.0), (20.0, 60.0), "muscle"),
    "sharp_alpha": LookAlike(sharp_alpha, (3.0, 20.0), (30.0, 120.0), "muscle"),
    "breach": LookAlike(breach, (5.0, 60.0), (40.0, 140.0), "muscle"),
    "fourteen_six": LookAlike(fourteen_six, (0.5, 1.2), (20.0, 75.0), "muscle"),
    "paroxysmal_fast": LookAlike(paroxysmal_fast, (1.0, 6.0), (20.0, 80.0), "muscle"),
    "seizure_fast": LookAlike(seizure_fast, (5.0, 25.0), (25.0, 120.0), "muscle"),
    "photic_driving": LookAlike(photic_driving, (5.0, 10.0), (20.0, 80.0), "mains"),
}
