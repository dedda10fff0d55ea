"""The report as one plain line, for the terminal."""

from __future__ import annotations

from sigguard.report.document import Report
from sigguard.report.page import measurable_words
from sigguard.report.words import PATTERN_WORDS, VERDICT_WORDS, plain, stretch


def one_line(report: Report) -> str:
    """``NAME: verdict; what can be trusted; the first advice``, led by PATIENT FIRST where somebody must look.

    Without line ends and control characters, whatever the header holds.
    """
    verdict = VERDICT_WORDS[report.verdict].lower()
    if report.patient_first:
        verdict = f"after that {verdict}"
    parts = [verdict, f"can be trusted: {measurable_words(report)}"]
    if report.advice_to_tell:
        act = report.advice_to_tell[0].text.rstrip(".")
        parts.append(f"next time: {act}" if report.for_next_time else act)
    line = f"{report.info.name}: {'; '.join(parts)}"
    if report.patient_first:
        alarm = report.patient_first[0]
        more = len(report.patient_first) - 1
        what = f"{PATTERN_WORDS.get(alarm.pattern, alarm.pattern)} {stretch(alarm.start_s, alarm.end_s)}"
        line = f"PATIENT FIRST: {what}{f' and {more} more' if more else ''} | {line}"
    return plain(line)
