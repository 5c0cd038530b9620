"""Which stretch a picture shows; expected numbers are exact, worked out by hand."""

from __future__ import annotations

from workbench.screens.view import View


def test_zooming_in_and_out_again_ends_at_the_whole() -> None:
    view = View.whole(0.0, 80.0).zoomed(0.5).zoomed(0.5)
    assert (view.low, view.high) == (30.0, 50.0)
    assert not view.is_whole
    assert view.zoomed(2.0).zoomed(2.0).is_whole
    assert view.zoomed(100.0) == View.whole(0.0, 80.0)


def test_a_view_stays_inside_the_record() -> None:
    view = View.whole(0.0, 80.0).zoomed(0.25)
    assert (view.panned(10.0).low, view.panned(10.0).high) == (60.0, 80.0)
    assert (view.panned(-10.0).low, view.panned(-10.0).high) == (0.0, 20.0)
    for _ in range(40):
        view = view.zoomed(0.5)
    assert view.high - view.low > 0.1


def test_a_view_of_a_growing_record_follows_its_end_only_where_it_shows_all() -> None:
    assert View.whole(0.0, 80.0).grown(90.0) == View.whole(0.0, 90.0)
    assert View(0.0, 80.0, 10.0, 20.0).grown(90.0) == View(0.0, 90.0, 10.0, 20.0)
