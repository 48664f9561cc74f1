"""Read the measured responses a study names."""

from identkit.errors import InputError, Problem
from identkit.grids import Gridded, datasets, gather
from identkit.readers.campaign import CampaignFiles, Progress, find_files, read_campaign
from identkit.settings import Settings


def find_measurements(settings: Settings) -> CampaignFiles:
    """Find the files of ``[responses] files``, relative to the study file.

    Raises
    ------
    InputError
        If the study names no files, the pattern matches none, or two carry the same labels.
    """
    pattern = settings.responses.files
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
        As `identkit.readers.campaign.read_responses`. The band stands in the attribute ``band``
        and cuts nothing: points outside it are marked by the screen stage.

    Raises
    ------
    InputError
        With one problem per bad file.
    """
    found = found or find_measurements(settings)
    responses = read_campaign(found, settings.responses, folder=settings.folder, progress=progress)
    if settings.responses.band is None:
        return responses
    band = list(settings.responses.band)
    return gather([part.assign_attrs(band=band) for part in datasets(responses)])
