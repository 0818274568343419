"""Everything that a fit leaves in its folder, as bytes under the names of the files."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from spinfit.fitting.data import Job
from spinfit.fitting.outcome import Outcome
from spinfit.fitting.resample import Bootstrap, Profile
from spinfit.fitting.sampling import Posterior
from spinfit.report.archive import archive_bytes
from spinfit.report.html import report_text
from spinfit.report.outcome_json import curves_text, outcome_text
from spinfit.report.plots import fit_figure, picture_bytes
from spinfit.report.positions import positions_figure, positions_text
from spinfit.report.tried import bootstrap_record, posterior_record, profile_record

ARCHIVE = "outcome.h5"
NUMBERS = ("outcome.json", "curves.csv", ARCHIVE)
"""Files without pictures."""
DRAWN = ("fit.png", "fit.svg", "report.html")
"""Files that hold pictures, which take longer to draw than a short fit takes."""


def more_record(
    profiles: Sequence[Profile] = (), resampled: Bootstrap | None = None, posterior: Posterior | None = None
) -> dict[str, Any]:
    """Return what outcome.json says of profiles, bootstrap and posterior; empty when there are none."""
    more: dict[str, Any] = {}
    if profiles:
        more["profiles"] = {one.name: profile_record(one) for one in profiles}
    if resampled is not None:
        more["bootstrap"] = bootstrap_record(resampled)
    if posterior is not None:
        more["posterior"] = posterior_record(posterior)
    return more


def outcome_files(
    outcome: Outcome,
    *,
    job: Job | None = None,
    profiles: Sequence[Profile] = (),
    resampled: Bootstrap | None = None,
    posterior: Posterior | None = None,
    pictures: bool = True,
) -> dict[str, bytes]:
    """Return the content of every file of an outcome by name.

    Parameters
    ----------
    outcome : Outcome
    job : Job, optional
        What was fitted: the page then compares its ions with free ones, and the archive keeps its files.
    profiles : sequence of Profile
    resampled : Bootstrap, optional
    posterior : Posterior, optional
    pictures : bool
        Whether `DRAWN` is among them.
    """
    curves = positions_text(outcome) if outcome.positions else curves_text(outcome)
    more = more_record(profiles, resampled, posterior)
    record = outcome_text(outcome, more)
    contents = {
        "outcome.json": record.encode(),
        "curves.csv": curves.encode(),
    }
    if pictures:
        figure = positions_figure(outcome) if outcome.positions else fit_figure(outcome)
        report = report_text(outcome, job=job, profiles=profiles, resampled=resampled, posterior=posterior)
        contents |= {"fit.png": picture_bytes(figure), "fit.svg": picture_bytes(figure, "svg")}
        contents["report.html"] = report.encode()
    return contents | {ARCHIVE: archive_bytes(outcome, job, more, record=record)}
