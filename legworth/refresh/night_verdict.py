"""The verdict on a night: checks that may stop it, and the report of what moved."""

from __future__ import annotations

import json
import traceback

from legworth.refresh.changes import ChangesOptions, find_changes
from legworth.refresh.changes_page import changes_page
from legworth.refresh.changes_prices import ExplainOptions
from legworth.refresh.checks import NightLegs, check_night
from legworth.refresh.work import Work
from legworth.store import Check, Forced, Manifest, Night, PartEntry
from legworth.store.check_words import CERTIFICATES, check_line
from legworth.store.history import user_name
from network import NotCertifiedError
from network.errors import NightStopped

__all__ = ["judge", "report_changes"]

EXPLAINED_SECONDS = 600.0
"""Seconds that looking for causes may take, where a part may take no less."""


def judge(work: Work, entries: list[PartEntry], last: Night | None) -> tuple[list[Check], Forced | None]:
    """Make the checks; stop the night unless it passes or is forced."""
    uncertified = [entry.name for entry in entries if not entry.certified]
    tonight = NightLegs.of(work.aside, work.settings.as_of)
    before = None if last is None else NightLegs.of(last, last.manifest.as_of)
    checks = check_night(tonight, before, work.settings.refresh, uncertified)
    failed = [check for check in checks if not check.passed]
    lines = [check_line(check) for check in failed]
    work.journal.note("checks", checks=[check.model_dump() for check in checks])
    if not failed:
        return checks, None
    reason = work.options.force
    if reason is not None and all(check.name != CERTIFICATES for check in failed):
        forced = Forced(who=user_name(), reason=reason)
        work.journal.warn("forced", f"published by {forced.who} in spite of: {'; '.join(lines)}", reason=reason)
        return checks, forced
    written = work.aside.stop(
        {
            "night": work.aside.name,
            "as_of": work.settings.as_of.isoformat(),
            "before": None if last is None else last.name,
            "reasons": lines,
            "checks": [check.model_dump() for check in checks],
        }
    )
    if uncertified:
        raise NotCertifiedError(f"{lines[0]}: nothing is published, and it cannot be forced")
    mend = f"all figures are in {written}; correct the tables, or publish all the same with --force REASON"
    raise NightStopped(work.aside.name, [*lines, mend])


def report_changes(work: Work, manifest: Manifest, last: Night | None) -> None:
    """Write what moved since last night.

    A fault in this report must not keep certified prices from the desk, so it is noted and the night goes on. Nor must
    a solver that dies or hangs: causes are looked for in processes that are ended when their time is over.
    """
    try:
        pricing = work.options.pricing
        explain = ExplainOptions(
            lp=pricing.lp,
            jobs=pricing.jobs if work.workers is None else 0,
            seconds=min(EXPLAINED_SECONDS, work.settings.refresh.part_seconds),
            scratch=work.aside.folder.parent.resolve(),  # the next night clears it, if this one is killed
        )
        manifest = manifest.model_copy(update={"rows": work.aside.rows()})
        changes = find_changes(work.aside, last, manifest, ChangesOptions(explain=explain))
        document = json.dumps(changes.as_dict(), indent=1, ensure_ascii=False, allow_nan=False, default=str)
        page = changes_page(changes)
    except Exception as error:  # of any kind, see above
        line = f"what moved since last night cannot be reported ({error}); the prices are not affected"
        work.journal.warn("changes_failed", line, trace=traceback.format_exc().splitlines())
        return
    work.aside.write("changes.json", document.encode() + b"\n")
    work.aside.write("changes.html", page.encode())
