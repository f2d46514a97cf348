"""Motion of a charged, diffusing droplet seen by a camera: one door to the modules that describe it.

`physics.increments`: steps between sightings, their covariance, whitening, the field's impulse.
`physics.likelihood`: restricted likelihood of the place noise, sufficient statistics.
`physics.freefit`: speeds, diffusion and place noise without any law; speeds of segments; stray sightings.
`physics.posterior`: radius and charges with the law. `physics.air_current`: vertical speed of the air.
`physics.population`: diffusion of many droplets as a check of the scale.
`physics.responses`: how the bench's shared inputs act on the law.
"""

from physics.air_current import air_current
from physics.freefit import (
    FreeFit,
    SegmentSpeeds,
    free_fit,
    robust_increments,
    segment_speeds,
)
from physics.increments import (
    Increments,
    Whitened,
    field_impulse,
    increments,
    segment_occupancy,
    whitened,
)
from physics.likelihood import MIN_INCREMENTS
from physics.population import PopulationRatio, population_diffusion
from physics.posterior import NO_CHARGE_REASONS, DropletPosterior, droplet_posterior
from physics.responses import input_responses

__all__ = [
    "MIN_INCREMENTS",
    "NO_CHARGE_REASONS",
    "DropletPosterior",
    "FreeFit",
    "Increments",
    "PopulationRatio",
    "SegmentSpeeds",
    "Whitened",
    "air_current",
    "droplet_posterior",
    "field_impulse",
    "free_fit",
    "increments",
    "input_responses",
    "population_diffusion",
    "robust_increments",
    "segment_occupancy",
    "segment_speeds",
    "whitened",
]
