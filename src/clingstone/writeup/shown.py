"""What can be read and drawn of an examination: all of it needs ``results`` alone."""

from __future__ import annotations

from typing import TYPE_CHECKING, Literal, overload

from clingstone.display import instead
from clingstone.needs import InputError
from clingstone.results import Results

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure


class Shown:
    """The ways in which an examination shows itself. Nothing is fitted here."""

    results: Results

    @overload
    def methods(self, format: Literal["markdown", "latex"] = "markdown") -> str: ...

    @overload
    def methods(self, format: Literal["word"]) -> bytes: ...

    def methods(self, format: str = "markdown") -> str | bytes:
        """The text for a methods section, with what answers which reporting item.

        format : "markdown"; "latex", a document that compiles alone; or "word", the bytes of a .docx
            file (extra ``word``).

        Raises InputError for another format, NotSupported for "word" without python-docx.
        """
        from clingstone.writeup.latex import latex_text
        from clingstone.writeup.word import word_bytes

        if format == "word":
            return word_bytes(self.results)
        if format == "latex":
            return latex_text(self.results)
        if format != "markdown":
            raise InputError(
                f"there is no methods text as ‘{format}’", instead(format, ("markdown", "latex", "word"))
            )
        return self.results.methods

    @property
    def figures(self) -> dict[str, str]:
        """Name → caption of every figure of the report."""
        from clingstone.writeup.gallery import names

        return names(self.results)

    def figure(self, name: str = "intervals", width: float = 660.0) -> Figure:
        """A figure of the report as a matplotlib figure, ``width`` / 72 inches wide; restyle its ``.axes``.

        Raises InputError when there is none of that name (see ``figures``).
        """
        from clingstone.writeup.gallery import figure

        return figure(self.results, name, width)

    def draw_intervals(self, ax: Axes, term: str | None = None) -> Axes:
        """One row's interval under every refit, advised first, drawn into axes of your own.

        term : the row, by default the first in focus. Raises InputError when it has no interval.
        """
        from clingstone.writeup.gallery import draw_intervals

        return draw_intervals(self.results, ax, term)

    def draw_shares(self, ax: Axes) -> Axes:
        """What the model leaves over, by structure, drawn into axes of your own.

        Raises InputError when no share was estimated.
        """
        from clingstone.writeup.gallery import draw_shares

        return draw_shares(self.results, ax)

    def report(self) -> str:
        """The report as one HTML page."""
        from clingstone.writeup.report import report

        return report(self.results)

    def __str__(self) -> str:
        from clingstone.writeup.terminal import terminal

        return terminal(self.results)

    def __repr__(self) -> str:
        advice = self.results.advice
        return f"<Examination of {self.results.case.name}: {advice.state}; {advice.headline}>"

    def _repr_html_(self) -> str:
        from clingstone.writeup.report import fragment

        return fragment(self.results)
