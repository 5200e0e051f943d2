"""Walks: correlated noise of type I and type II, and the reflecting walk that turns it into star formation histories."""

from hurstfit.walks.noise import NOISE_TYPES, NoiseType, draw_noise
from hurstfit.walks.reflect import formed_mass, reflect

__all__ = ["NOISE_TYPES", "NoiseType", "draw_noise", "formed_mass", "reflect"]
