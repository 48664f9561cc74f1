"""Read the measured responses a study names."""

from identkit.errors import InputError, Problem
from identkit.grids import Gridded
from identkit.readers.campaign import CampaignFiles, Progress, find_files, read_campaign
from identkit.settings import Settings

READ_SETTINGS = (
    *(
        f"responses.{name}"
        for name in ("files", "averages", "sample_period", "bad_files", "columns", "units")
    ),
    "records",
)
"""What the stage depends on; the band is not among them, it only marks."""


def find_measurements(settings: Settings) -> CampaignFiles:
    """Find the files of ``[responses]`` or ``[records]``, relative to the study file.

    Raises
    ------
    InputError
        If the study names no files or both kinds, the pattern matches none, or two carry the same
        labels.
    """
    pattern = settings.responses.files
    if settings.records is not None:
        if pattern is not None:
            place = f"{settings.path}, [responses] files"
            raise InputError(Problem(place, f'"{pattern}" beside [records]', "one of the two"))
        return find_files(settings.records.files, folder=settings.folder)
    if pattern is None:
        place = f"{settings.path}, [responses] files"
        expected = 'a path pattern such as "bench/{unit}/H{head}_{temperature:g}C.csv"'
        raise InputError(Problem(place, "nothing", expected))
    return find_files(pattern, folder=settings.folder)


def read(
    settings: Settings, found: CampaignFiles | None = None, progress: Progress | None = None
) -> Gridded:
    """Read the measured responses of a study.

    Parameters
    ----------
    settings
        The study.
    found
        What `find_measurements` gave, when it was asked before.
    progress
        Called with the number of files done and the number of all.

    Returns
    -------
    Dataset or DataTree
        As `identkit.readers.campaign.read_responses`. The band cuts nothing here: points outside
        it are marked by the screen stage.

    Raises
    ------
    InputError
        With one problem per bad file.
    """
    return read_campaign(
        found or find_measurements(settings),
        settings.responses,
        folder=settings.folder,
        progress=progress,
    )
