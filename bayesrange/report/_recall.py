"""Maps of what each animal remembers, for a GIS: one GeoTIFF an animal."""

import numpy as np

from bayesrange.report._raster import safe_names, write_raster
from bayesrange.report._read_memory import MemoryContents

RECALL_BANDS = ("recall of the long memory, posterior mean", "recall of the long memory, posterior sd")
RECALL_UNIT = "1"


def recall_files(run: MemoryContents) -> dict[str, str]:
    """The GeoTIFF of each animal, relative to the run folder; none for a card without memory."""
    if run.memory_use is None or "recall_mean" not in run.memory_use:
        return {}
    return {name: f"maps/recall_{stem}.tif" for name, stem in zip(run.animals, safe_names(run.animals), strict=True)}


def write_recall(run: MemoryContents) -> None:
    """Write each animal's recall at its last fix, 0 to 1: band 1 the posterior mean, band 2 the posterior sd."""
    for animal, name in recall_files(run).items():
        use = run.memory_use.sel(animal=animal).transpose(..., "y", "x")
        bands = [np.where(run.inside, use[part].values, np.nan) for part in ("recall_mean", "recall_sd")]
        write_raster(run, run.folder / name, np.stack(bands), RECALL_BANDS, RECALL_UNIT, {"animal": animal})
