"""Where the files are that come with the package: the model cards and the bundled study.

In an installed package they stand inside it (`bayesrange/models`, `bayesrange/demo`); in a checkout beside it.
"""

from pathlib import Path

_PACKAGE = Path(__file__).resolve().parent
_CHECKOUT = _PACKAGE.parent


def models_folder() -> Path:
    """The folder with the model cards, one TOML file a model.

    Raises:
        FileNotFoundError: the installation is incomplete.
    """
    return _first_existing("model cards", _PACKAGE / "models", _CHECKOUT / "models")


def demo_folder() -> Path:
    """The folder with the bundled study: its study file and the data files it names.

    It may be read-only: copy the study before a run is written beside it.

    Raises:
        FileNotFoundError: the installation is incomplete.
    """
    return _first_existing("bundled study", _PACKAGE / "demo", _CHECKOUT / "case_studies" / "marram_heath" / "study")


def demo_truth() -> Path:
    """The file that says what is true in the bundled study; in a checkout it lies beside the study's folder.

    Raises:
        FileNotFoundError: the installation is incomplete.
    """
    folder = demo_folder()
    for file in (folder / "truth.json", folder.parent / "truth.json"):
        if file.is_file():
            return file
    raise FileNotFoundError(
        f"The truth of the bundled study should be in '{folder}', and it is not there; install bayesrange anew."
    )


def _first_existing(what: str, *folders: Path) -> Path:
    for folder in folders:
        if folder.is_dir():
            return folder
    places = " and ".join(f"'{folder}'" for folder in folders)
    raise FileNotFoundError(f"The {what} of bayesrange should be in {places}, and neither exists; install it anew.")
