"""What the sampler knows of a model: one interface, a class for each kind of card."""

from typing import Any, Protocol, runtime_checkable

import numpy as np
from jaxtyping import Array

from bayesrange.inference._hierarchy import Layout
from bayesrange.inference._memory_data import MemoryData, MemorySpec
from bayesrange.inference._range_data import RangeData, RangeSpec

type Spec = RangeSpec | MemorySpec
type Data = RangeData | MemoryData


@runtime_checkable
class Model(Protocol):
    """A model of one kind.

    Attributes:
        layout: the hierarchy of its units; None without one.
        has_other_states: whether `other_state` is to be asked at some draws.
    """

    layout: Layout | None
    has_other_states: bool

    def prior(self, data: Any) -> Any:
        """Parameters of the numerics, drawn from their priors as NumPyro sites."""
        ...

    def joint(self, data: Any) -> None:
        """Priors and likelihood."""
        ...

    def centre(self, name: str, usual: Array, data: Any) -> Array:
        """Where the search for the mode begins, given what the site's prior suggests."""
        ...

    def derive(self, parameters: Any, data: Any) -> tuple[dict[str, Array], dict[str, Array]]:
        """Of one draw, what the run folder keeps and what it only sums over draws."""
        ...

    def extras(self, program: Any, positions: np.ndarray, data: Any, extra: Any) -> dict[str, np.ndarray]:
        """What a chain adds at its end, given its draws on the unconstrained space and the task's `extra`."""
        ...

    def other_state(self, parameters: Any, data: Any) -> Array:
        """Whether another start of a solver leads to another solution."""
        ...


def model_of(spec: Spec) -> Model:
    """The model that a specification means."""
    if isinstance(spec, MemorySpec):
        from bayesrange.inference._memory_model import MemoryModel

        return MemoryModel(spec)
    from bayesrange.inference._range_model import RangeModel

    return RangeModel(spec)
