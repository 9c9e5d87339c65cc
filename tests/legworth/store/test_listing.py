"""The list of nights: read at any width, and what was stopped, forced or superseded."""

from __future__ import annotations

import json
from datetime import timedelta
from pathlib import Path

import pytest
from rich.console import Console

from legworth.store import Check, Forced, Store, StoreError, listing
from legworth.store.stopped import stopped_nights
from network.store_settings import StoreSettings
from tests.legworth.store.small_nights import FIRST, publish

ODD = Check(name="demand_total", limit=0.25, found=1.0, passed=False, look_at=("L1: 20 -> 40", "L2: 10 -> 20"))
REASON = "the forecast was rebuilt from all of last year, checked by the head of planning and by itinerary control"


@pytest.fixture
def store(tmp_path: Path) -> Store:
    return Store.open(tmp_path / "store", create=True)


def stop(store: Store, day: int, checks: tuple[Check, ...] = (ODD,)) -> str:
    """Stop a night as a refresh does."""
    as_of = FIRST + timedelta(days=day)
    with store.begin(as_of) as aside:
        aside.stop(
            {
                "night": aside.name,
                "as_of": as_of.isoformat(),
                "reasons": ["one line a check"],
                "checks": [check.model_dump() for check in checks],
            }
        )
        return aside.name


def test_a_stopped_night_is_superseded_by_a_later_one_of_its_snapshot_or_a_later_snapshot(store: Store) -> None:
    publish(store, 1.0)
    superseded = stop(store, 2)
    earlier = publish(store, 1.0, day=1).name
    assert [night.superseded_by for night in stopped_nights(store)] == [None], f"{earlier} has an older snapshot"
    forced = publish(store, 2.0, day=2, forced=Forced(who="desk", reason=REASON)).name
    left = stop(store, 3)
    publish(store, 2.0, day=2)
    assert [(night.name, night.superseded_by) for night in stopped_nights(store)] == [
        (superseded, forced),
        (left, None),
    ]
    store.night(forced).folder.joinpath("manifest.json").write_text("{")
    assert stopped_nights(store)[0].superseded_by == store.nights()[-1].name


def test_reasons_are_those_of_the_checks_that_failed(store: Store) -> None:
    held = Check(name="zero", limit=0.5, found=0.1, passed=True)
    late = Check(name="snapshot", limit=0.0, found=24.0, passed=False)
    stop(store, 0, (held, ODD, late))
    (night,) = stopped_nights(store)
    assert night.reasons == (
        "move of all demand to come: 100 %, at most 25 % allowed",
        "snapshot older than last night's: 24 h, at most 0 h allowed",
    )
    assert night.why() == f"{night.reasons[0]}, and 1 more"


@pytest.mark.parametrize(
    "text", ["", "{", "[]", "null", "[" * 100_000, '{"checks": 3, "as_of": "soon"}', '{"reasons": 1}']
)
def test_a_damaged_note_of_a_stopped_night_stops_nobody(store: Store, text: str) -> None:
    name = stop(store, 0)
    (store.path / "stopped" / f"{name}.json").write_text(text)
    publish(store)
    (night,) = stopped_nights(store)
    assert (night.name, night.reasons, night.superseded_by) == (name, (), None)
    with pytest.raises(StoreError, match=r"was stopped by a check and not published \(its file does not say why\)"):
        store.night(name)


def test_a_night_that_is_not_there_is_said_to_be_stopped_thinned_lost_or_begun(store: Store) -> None:
    stopped = stop(store, 0)
    with pytest.raises(StoreError, match=rf"{stopped} was stopped .* 25 % allowed\); read .*stopped/{stopped}\.json"):
        store.night(stopped)
    first, second, third = (publish(store, day=day) for day in range(3))
    third.folder.rename(store.path / "elsewhere")
    with pytest.raises(StoreError, match=f"{third.name} was published, and its folder is gone"):
        store.night(third.name)
    store.restore(second.name, "desk", "the third is gone")
    assert store.thin(StoreSettings(keep_newest=1, keep_weeks=0, keep_months=0), "to make room") == (first.name,)
    with pytest.raises(StoreError, match=rf"{first.name} was removed by thinning on .* \(to make room\)"):
        store.night(first.name)
    with store.begin(FIRST) as aside:
        aside.log.write_text("{}\n")
    with pytest.raises(StoreError, match=rf"{aside.name} was begun and not published; what happened is in .*jsonl"):
        store.night(aside.name)


@pytest.mark.parametrize("width", [80, 100, 120, 140, 200])
def test_the_list_fits_its_width_and_breaks_no_word(
    store: Store, width: int, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    stop(store, 1)
    forced = publish(store, day=1, forced=Forced(who="night desk", reason=REASON))
    left = stop(store, 2)
    monkeypatch.setattr(
        listing,
        "console_for_output",
        lambda: Console(markup=False, width=width, force_terminal=True, color_system=None),
    )
    listing.print_nights(store.nights(), forced.name, stopped_nights(store))
    lines = capsys.readouterr().out.splitlines()
    assert max(map(len, lines)) <= width
    rows = [line for line in lines if line.startswith("│")]
    assert len(rows) == 1, "one line a night"
    assert forced.name in rows[0]
    assert "yes" in rows[0]
    text = " ".join(line.strip() for line in lines)
    assert f"{forced.name} was forced by night desk: {REASON}" in text
    assert f"{left} was stopped by a check and not published: move of all demand to come: 100 %" in text
    assert f"(by {forced.name})" in text
    assert text.count("was stopped by a check") == 1, "what is superseded is named in a line of its own"
    assert ("Products" in text, "Taken over" in text) == (width >= 118, width >= 134)


def test_many_stopped_nights_are_counted(store: Store, capsys: pytest.CaptureFixture[str]) -> None:
    names = [stop(store, day) for day in range(7)]
    listing.print_nights((), None, stopped_nights(store))
    out = capsys.readouterr().out
    assert [name for name in names if f"{name} was stopped" in out] == names[2:]
    assert "2 earlier nights were stopped too; read " in out
    publish(store, day=30)
    listing.print_nights(store.nights(), None, stopped_nights(store))
    out = capsys.readouterr().out
    assert "was stopped" not in out
    assert out.rstrip().endswith(f"{names[6]} (by {store.nights()[0].name}), and 2 earlier")


def test_records_of_stopped_nights_are_plain(store: Store) -> None:
    name = stop(store, 0)
    (night,) = stopped_nights(store)
    assert json.loads(json.dumps(night.as_dict())) == {
        "night": name,
        "file": str(store.path / "stopped" / f"{name}.json"),
        "as_of": FIRST.isoformat(),
        "reasons": ["move of all demand to come: 100 %, at most 25 % allowed"],
        "superseded_by": None,
    }
