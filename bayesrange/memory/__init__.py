"""Movement led by memory: steps, traces of past stays, likelihood of a track, and tracks drawn from the model.

Pure functions of arrays in km and hours, double precision unless said; no files, no sampling.
"""

import jax

jax.config.update("jax_enable_x64", True)

from bayesrange.memory._landscape import Landscape, allowed, read_layers  # noqa: E402

__all__ = ["Landscape", "allowed", "read_layers"]
