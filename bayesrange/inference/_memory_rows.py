"""Rows of parameters.csv for the memory cards."""

from collections.abc import Iterator

import numpy as np
import xarray as xr

from bayesrange.inference._cards import COMMON, SIGNED
from bayesrange.inference._memory_data import MemorySpec
from bayesrange.inference._scales import LayerScale
from bayesrange.inference._summary import Row, raw_layer_unit

ON_LOG = "log scale"


def memory_rows(
    spec: MemorySpec, scales: "HasLayers", posterior: xr.Dataset, prior: xr.Dataset, least_decay: float, seed: int
) -> list[Row]:
    """Every reported quantity, in the order of the table.

    Args:
        spec: the model, of all animals.
        scales: frozen scales, for the rows in raw units.
        posterior: parameters, leading (chain, draw).
        prior: the same under the prior.
        least_decay: shortest decay time [h].
        seed: for the draws of a new animal.
    """
    sets, rng, found = (posterior, prior), np.random.default_rng(seed), []
    for name in spec.parameters:
        if name in COMMON:
            found += _of_all(name, spec, sets)
            continue
        for layer in spec.layers if name == "selection" else (None,):
            found += _of_parameter(name, layer, spec, scales, sets, least_decay, rng)
    if "home_pull" in spec.parameters:
        for animal in spec.animals:
            for axis in ("home_x", "home_y"):
                pair = _pair(sets, axis, animal=animal)
                found.append(Row(f"{axis}[{animal}]", "m", *pair, individual=spec.pooled, animal=animal))
    return found


type HasLayers = object
"""Scales with `layers`: name → `LayerScale`."""


def _of_all(name: str, spec: MemorySpec, sets: tuple[xr.Dataset, xr.Dataset]) -> Iterator[Row]:
    """A parameter that animals share, or their own where each is fitted alone."""
    unit = str(sets[0][name].attrs["units"])
    if name == "step_rhythm":
        animals = spec.animals if "animal" in sets[0][name].dims else ("",)
        for wave in sets[0]["harmonic"].values:
            for animal in animals:
                pick = {"harmonic": str(wave)} | ({"animal": animal} if animal else {})
                yield Row(
                    f"{name}[{wave}{f', {animal}' if animal else ''}]", unit, *_pair(sets, name, **pick), animal=animal
                )
        return
    if "animal" not in sets[0][name].dims:
        yield Row(name, unit, *_pair(sets, name))
        return
    for animal in spec.animals:
        yield Row(f"{name}[{animal}]", unit, *_pair(sets, name, animal=animal), animal=animal)


def _of_parameter(
    name: str,
    layer: str | None,
    spec: MemorySpec,
    scales: HasLayers,
    sets: tuple[xr.Dataset, xr.Dataset],
    least_decay: float,
    rng: np.random.Generator,
) -> Iterator[Row]:
    """The rows of one parameter, or of the selection for one layer."""
    pick = {"layer": layer} if layer is not None else {}
    label, unit = (f"{name}[{layer}]" if layer is not None else name), str(sets[0][name].attrs["units"])
    factor, raw_unit = None, ""
    if layer is not None:
        scale: LayerScale = scales.layers[layer.removesuffix(", day").removesuffix(", night")]  # type: ignore[attr-defined]
        unit = f"against {scale.reference}" if scale.reference else unit
        factor, raw_unit = raw_layer_unit(scale)

    def own_name(animal: str) -> str:
        return f"{name}[{layer}, {animal}]" if layer is not None else f"{name}[{animal}]"

    if not spec.pooled:
        for animal in spec.animals:
            pair = _pair(sets, name, **pick, animal=animal)
            yield Row(own_name(animal), unit, *pair, animal=animal)
            if factor is not None:
                yield Row(f"{own_name(animal)} raw", raw_unit, *(v * factor for v in pair), animal=animal)
        return
    centre = _pair(sets, f"{name}_population", **pick)
    yield Row(label, unit, *centre)
    if factor is not None:
        yield Row(f"{label} raw", raw_unit, *(value * factor for value in centre))
    own_scale = unit if name in SIGNED else ON_LOG
    yield Row(f"{label} spread", own_scale, *_pair(sets, f"{name}_spread", **pick))
    for covariate in spec.covariates:
        yield Row(f"{label}:{covariate}", own_scale, *_pair(sets, f"{name}_effect", **pick, covariate=covariate))
    for animal in spec.animals:
        yield Row(own_name(animal), unit, *_pair(sets, name, **pick, animal=animal), individual=True)
    yield Row(own_name("new animal"), unit, *(_new(name, data, pick, least_decay, rng) for data in sets))


def _new(name: str, data: xr.Dataset, pick: dict[str, str], least_decay: float, rng: np.random.Generator) -> np.ndarray:
    """Draws of an animal that was not tracked, at covariates 0; decay times through their excesses."""

    def noise() -> np.ndarray:
        return rng.standard_normal(np.shape(centre))

    def drawn(centre: np.ndarray, of: str, noise: np.ndarray) -> np.ndarray:
        spread = np.asarray(data[f"{of}_spread"].sel(pick if of == "selection" else {}).values, float)
        return centre + spread * noise if of in SIGNED else centre * np.exp(spread * noise)

    centre = np.asarray(data[f"{name}_population"].sel(pick).values, float)
    if name == "working_decay":
        return least_decay + drawn(centre - least_decay, name, noise())
    if name == "reference_decay":
        working, first = np.asarray(data["working_decay_population"].values, float), noise()
        both = {"coefficient": "working_decay", "coefficient_2": "reference_decay"}
        r = np.asarray(data["animal_correlation"].sel(both).values, float)
        second = r * first + np.sqrt(np.maximum(1 - r**2, 0)) * noise()
        excess = drawn(centre - working, name, second)
        return least_decay + drawn(working - least_decay, "working_decay", first) + excess
    return drawn(centre, name, noise())


def _pair(sets: tuple[xr.Dataset, xr.Dataset], variable: str, **at: str) -> tuple[np.ndarray, np.ndarray]:
    first, second = (np.asarray(data[variable].sel(at).values, float) for data in sets)
    return first, second
