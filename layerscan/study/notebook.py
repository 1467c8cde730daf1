"""A study from a notebook: its results as pandas tables in long form."""

from __future__ import annotations

import os
from dataclasses import dataclass
from typing import TYPE_CHECKING

from layerscan.study.ledger import Ledger
from layerscan.study.results import (
    IMAGE_COLUMNS,
    LAYER_COLUMNS,
    SPECTRUM_COLUMNS,
    StudyResults,
    collect_results,
    image_rows,
    layer_rows,
    make_table,
    spectrum_rows,
)

if TYPE_CHECKING:
    import pandas as pd

    from layerscan.report.summary import StudySummary

SPECIMEN_COLUMNS = (
    "group", "specimen", "quantity", "mean_nm", "u_nm", "sd_between_images_nm", "n_images", "n_layers",
)  # fmt: skip


@dataclass(frozen=True, kw_only=True)
class Study:
    """A study that was run, finished or not. Every table is made anew when it is asked for."""

    results: StudyResults

    @property
    def images(self) -> pd.DataFrame:
        """One row an image: what it belongs to, its state, its means with u, sd and n [nm]."""
        return make_table(image_rows(self.results), IMAGE_COLUMNS)

    @property
    def layers(self) -> pd.DataFrame:
        """One row a layer; ``counts`` says whether its image enters the means."""
        return make_table(layer_rows(self.results), LAYER_COLUMNS)

    @property
    def spectra(self) -> pd.DataFrame:
        """One row an observed spectrum, with its main peak."""
        return make_table(spectrum_rows(self.results), SPECTRUM_COLUMNS)

    @property
    def specimens(self) -> pd.DataFrame:
        """One row a specimen and quantity: the mean over its images, each counting once."""
        from layerscan.study import analysis

        rows = []
        for specimen in analysis.find_specimens(analysis.counted_images(self.results)):
            for quantity in analysis.TABLE_QUANTITIES:
                estimate = specimen.estimate(quantity)
                if estimate is not None:
                    values = (estimate.mean, estimate.u, estimate.sd, estimate.n_images, estimate.n_layers)
                    row = (specimen.group, specimen.name, estimate.quantity, *values)
                    rows.append(dict(zip(SPECIMEN_COLUMNS, row, strict=True)))
        return make_table(rows, SPECIMEN_COLUMNS)

    def summarise(self) -> StudySummary:
        """Everything that the page of the study shows: tests, variance components, decisions."""
        from layerscan.study.workup import summarise

        return summarise(self.results)


def open_study(folder: str | os.PathLike[str]) -> Study:
    """Open a study that was run.

    Parameters
    ----------
    folder : path
        Where its ledger lies. A study that is running may be opened: the tables hold what is recorded so far.

    Returns
    -------
    Study
        With ``images``, ``layers``, ``specimens`` and ``spectra`` as pandas tables.

    Raises
    ------
    InputError
        There is no ledger, or a newer layerscan wrote it.
    """
    with Ledger(folder) as ledger:
        return Study(results=collect_results(ledger))
