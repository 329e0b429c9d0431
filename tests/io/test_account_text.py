"""What became of the bodies, as text."""

import numpy as np
import pytest

from daraf.bem.solution import BodyAccount
from daraf.io.account_text import MOST_BODIES, account_document, account_text, counted, facet_columns


def account(**more):
    given = {"body": "ring", "triangles": 96, "slivers": 0, "faces": 50, "panels": 48, "area_change": 0.0}
    return BodyAccount(**{**given, "volume_change": None, **more})


@pytest.mark.parametrize(("n", "text"), [(0, "0 bodies"), (1, "1 body"), (2, "2 bodies")])
def test_plurals(n, text):
    assert counted(n, "body", "bodies") == text


def test_a_plain_body_is_one_plain_line():
    assert account_text(account(faces=1)) == "ring: 96 triangles, 1 flat face, 48 panels"


def test_changes_and_slivers_are_told():
    text = account_text(account(slivers=1, area_change=2e-4, volume_change=-1e-7))
    assert "(1 sliver among them)" in text
    assert "area changed by +2.0e-04" in text
    assert "volume" not in text  # below what rounding may do


def test_what_was_taken_as_round_is_told():
    turn = np.radians(7.5)
    one = account(round_faces=48, turn=(turn, turn), round_holes=48, rim_turn=(np.radians(7.0), np.radians(9.0)))
    assert account_text(one).endswith("; taken as round: 48 of 50 faces, 48 edges of holes, turning by 7 to 9 deg")
    columns = facet_columns({"bodies": account_document([account(), one])})
    assert columns[""] == ["ring"]
    assert columns["faces"] == ["48 of 50"]
    assert columns["turning by"] == ["7 to 9 deg"]


def test_long_lists_are_cut():
    turn = np.radians(7.5)
    many = account_document([account(round_faces=4, turn=(turn, turn))] * (MOST_BODIES + 3))
    columns = facet_columns({"bodies": many})
    assert columns[""][-1] == "and 3 more, in log.txt"
    assert len({len(column) for column in columns.values()}) == 1
    assert facet_columns({"bodies": account_document([account()])}) == {}
