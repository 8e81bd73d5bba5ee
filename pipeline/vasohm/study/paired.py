"""Two states of one bed among measured images: the images that belong together read, and held against each other."""

from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path

import numpy as np
import pandas as pd

from vasohm.cohorts.pairs import PAIRED_BY, ImagePair, compare_states, pair_images
from vasohm.cohorts.states import Setup, State
from vasohm.config.settings import CompareSettings, Settings
from vasohm.errors import Problem, RequestError, VasohmError
from vasohm.flow.rheology import make_blood
from vasohm.image.read import read_mask
from vasohm.results.cells import unguard_text
from vasohm.study.appraise import read_table
from vasohm.study.folder import image_folder

_TABLES = ("segments", "points", "nodes", "networks")


def compare_pairs(
    results_dir: Path, sheet: pd.DataFrame, compare: CompareSettings, settings: Settings
) -> Mapping[str, pd.DataFrame]:
    """Hold images of one bed against each other, where the study compares conditions or times.

    Parameters
    ----------
    results_dir : Path
        Folder that was `--out` of `measure`.
    sheet : pd.DataFrame
        One row an image: image_id, status, and the design of the image sheet.
    compare : CompareSettings
        What is compared, and the reference.
    settings : Settings
        What the images were measured with.

    Returns
    -------
    Mapping[str, pd.DataFrame]
        The tables of `vasohm.results.columns_pairs.PAIRED`; none where something else is compared.

    Raises
    ------
    RequestError
        When a table of an image's results cannot be read.
    """
    if compare.by not in PAIRED_BY:
        return {}
    radius = settings.radius
    setup = Setup(make_blood(settings.blood), radius.plasma_layer_um, radius.plasma_layer_se_um)
    pairs = pair_images(sheet, compare.by, compare.reference)
    return compare_states(pairs, _states(results_dir, pairs), setup)


def _states(results_dir: Path, pairs: Sequence[ImagePair]) -> Iterator[tuple[State, State]]:
    """Read both states of each pair that has them; a reference that serves several pairs is read once."""
    first: State | None = None
    for pair in pairs:
        if pair.reason:
            continue
        if first is None or first.image_id != pair.image_id_a:
            first = read_state_of(image_folder(results_dir, pair.image_id_a))
        yield first, read_state_of(image_folder(results_dir, pair.image_id_b))


def read_state_of(folder: Path) -> State:
    """Read a measured image.

    Raises
    ------
    RequestError
        When a table or the field of view is not there or cannot be read.
    """
    image = read_table(folder / "image.csv", ours=True).iloc[0].to_dict()
    tables = {name: _unguarded(read_table(folder / f"{name}.csv", ours=True)) for name in _TABLES}
    path = folder / "fov.tif"
    try:
        fov = read_mask(path, (int(image["height_px"]), int(image["width_px"])))
    except VasohmError as fault:
        raise RequestError([Problem(file=str(path), message=f"{fault} Measure this image again.")]) from None
    return State(folder.name, {str(name): value for name, value in image.items()}, tables, np.asarray(fov))


def _unguarded(table: pd.DataFrame) -> pd.DataFrame:
    texts = [name for name in table if table[name].dtype.kind not in "fiu"]
    return table.assign(**{str(name): table[name].map(unguard_text) for name in texts})
