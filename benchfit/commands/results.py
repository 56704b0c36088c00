"""Where the outcomes of a command line's captures go: one after the other, nothing of them kept."""

from __future__ import annotations

import argparse
import io
import sys
from collections.abc import Iterable, Iterator
from contextlib import ExitStack
from typing import TYPE_CHECKING, Any, TextIO

from benchfit.commands import streams
from benchfit.commands.table import Table

if TYPE_CHECKING:
    from benchfit.commands.work import Outcome
    from benchfit.explain.result import Explanation
    from benchfit.sheet import Sheet
    from benchfit.show.lot import Lot
    from benchfit.show.progress import LotProgress


class Results:
    """Reports of one capture, or of a joint set."""

    def __init__(self, args: argparse.Namespace) -> None:
        self.args = args
        self.is_text = "-" not in (args.json, args.csv)
        files = (args.json, args.csv, args.plot, args.report)
        self.has_files = any(path not in (None, "-") for path in files) or args.csv == "-"
        self.status = 0
        self.is_checked_bad = False
        self.is_read = True
        self.progress: LotProgress | None = None

    def take(self, outcomes: Iterable[Outcome]) -> int:
        """Put out everything there is; the exit status."""
        for _ in self.records(outcomes):
            pass
        return self.done()

    def done(self) -> int:
        return self.status or int(self.is_checked_bad and self.args.check)

    def records(self, outcomes: Iterable[Outcome]) -> Iterator[dict[str, Any]]:
        """The record of each outcome, after it was put out; files appear when all are through."""
        with ExitStack() as files:
            lines = self._lines(files)
            table = Table() if self.args.csv is not None else None
            for number, outcome in enumerate(outcomes):
                self._take(outcome, number, lines)
                if table is not None:
                    table.add(outcome.record)
                yield outcome.record
                if not self.is_read and not self.has_files:
                    break  # whoever read standard output has seen enough, and nothing else is wanted
            if self.progress is not None:
                self.progress.stop()
            if table is not None:
                self._write(table)

    def _lines(self, files: ExitStack) -> TextIO | None:
        """The file that the records go to."""
        if self.args.json in (None, "-"):
            return None
        scratch = files.enter_context(streams.replacing(self.args.json))
        return files.enter_context(streams.writing(scratch))

    def _take(self, outcome: Outcome, number: int, lines: TextIO | None) -> None:
        from benchfit.show.record import dumps

        self.is_checked_bad |= outcome.record.get("verdict") in ("fail", "conditional")
        if outcome.error is not None:
            self.status = self.status or outcome.error.status
            self._say(outcome.error.says)
        self._talk(outcome)
        if lines is not None:
            lines.write(f"{dumps(outcome.record)}\n")
        if self.args.json == "-":
            self.is_read = self.is_read and streams.emit(dumps(outcome.record))
        elif outcome.explanation is not None and self.is_text:
            self._show(outcome.explanation, is_first=number == 0)
        if self.progress is not None:
            self.progress.step()

    def _show(self, explanation: Explanation, *, is_first: bool) -> None:
        from benchfit.show.text import render

        text = render(explanation, width=streams.width(), colour=streams.colour())
        self.is_read = self.is_read and streams.emit(text if is_first else f"\n{text}")

    def _say(self, text: str) -> None:
        if self.progress is None:
            streams.say(text)
        else:
            self.progress.say(f"benchfit: {text}")

    def _talk(self, outcome: Outcome) -> None:
        if self.args.verbose and not self.args.quiet:
            for path, notes in outcome.notes:
                for key, value in notes.items():
                    streams.say(f"{path}: {key}: {value}")
            if outcome.trace:
                print(outcome.trace, file=sys.stderr)

    def _write(self, table: Table) -> None:
        if self.args.csv == "-":
            text = io.StringIO()
            table.write(text)
            streams.emit(text.getvalue().removesuffix("\n"))
        else:
            with streams.replacing(self.args.csv) as scratch, streams.writing(scratch) as file:
                table.write(file)


class LotResults(Results):
    """Many captures: one line for each (with -v each in full), and what they have in common."""

    def __init__(self, args: argparse.Namespace, sheet: Sheet | None, count: int) -> None:
        super().__init__(args)
        self.title = "" if sheet is None else sheet.title
        is_quiet = args.quiet or args.verbose or args.json == "-"
        if sys.stderr.isatty() and not is_quiet:
            from benchfit.show.progress import LotProgress

            self.progress = LotProgress(count, streams.colour(sys.stderr))

    def take(self, outcomes: Iterable[Outcome]) -> int:
        from benchfit.show.lot import lot_of

        try:
            lot = lot_of(self.records(outcomes), title=self.title)
        finally:
            if self.progress is not None:
                self.progress.stop()
        if self.is_text and self.is_read:
            self._show_lot(lot)
        self._draw(lot)
        return self.done()

    def _show_lot(self, lot: Lot) -> None:
        from benchfit.show.lot_text import render_lot

        text = render_lot(lot, width=streams.width(), colour=streams.colour())
        self.is_read = streams.emit(f"\n{text}" if self.args.verbose else text)

    def _draw(self, lot: Lot) -> None:
        if self.args.report is not None:
            from benchfit.show.lot_page import report_lot

            with streams.replacing(self.args.report) as scratch:
                report_lot(lot, scratch)
        if self.args.plot is not None:
            from benchfit.show.lot_charts import plot_lot

            with streams.replacing(self.args.plot) as scratch:
                plot_lot(lot, scratch)
