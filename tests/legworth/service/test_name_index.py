"""Names are found among many, and only they."""

from __future__ import annotations

import pyarrow as pa
from hypothesis import given
from hypothesis import strategies as st

from legworth.service.served_night import NameIndex
from tests.networks import examples

names = st.text(st.characters(codec="utf-8"), max_size=6).filter(lambda name: not name.endswith("\0"))


@examples(200)
@given(st.dictionaries(names, st.sampled_from("abc"), max_size=12), st.lists(st.text(max_size=6), max_size=8))
def test_every_name_is_found_where_it_is(known: dict[str, str], others: list[str]) -> None:
    others = [name.encode(errors="ignore").decode() for name in others]
    index = NameIndex(
        pa.chunked_array([pa.array(list(known), pa.string())]),
        pa.chunked_array([pa.array(list(known.values()), pa.string())]),
    )
    asked = [*known, *others]
    assert len(index) == len(known)
    assert [index.part_of(name) for name in asked] == [known.get(name) for name in asked]
    many: dict[int, str | None] = {}
    for part, rows in index.by_part(index.codes_of(asked)):
        many |= dict.fromkeys(rows.tolist(), part)
    found = [many[place] for place in range(len(asked))]
    # Bytes of numpy end at their last that is not zero: such names are sorted out in the part itself.
    assert all(had == known.get(name.rstrip("\0")) for name, had in zip(asked, found, strict=True))
