"""A rating as a table: the one module of the hydraulics that knows pandas, imported when it is needed."""

from __future__ import annotations

import importlib

import pandas as pd


class Rating(pd.DataFrame):
    """A stage-discharge rating: a DataFrame that draws itself.

    ``attrs["units"]`` holds ``si`` or ``us``. Anything taken from it is a plain DataFrame again.
    """

    @property
    def _constructor(self):
        return pd.DataFrame

    def plot(self, **how):
        """Draw stage against discharge; see :func:`terrain2q.output.plots.plot_rating`."""
        # pictures stand above the numbers in the house, so that they are fetched only when asked for
        return importlib.import_module("terrain2q.output.plots").plot_rating(self, **how)

    def _repr_html_(self) -> str:
        return importlib.import_module("terrain2q.output.notebook").rating_html(self)
