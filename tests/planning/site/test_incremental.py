"""However a site came to be what it is, its snapshot is the same, bit for bit."""

import numpy as np
import pytest
from tests.planning.site.site_twins import SMALL, change, copy_of, declared, read_all

from byway_planning.site import LayerSettings, SiteModel, SiteSettings

FINE = SiteSettings((0.0, 0.0, 4.1, 3.3), cell_m=0.05, reach_m=0.8, tile_cells=16)
COARSE = SiteSettings((-20.0, -9.0, 19.0, 9.0), cell_m=0.25, reach_m=2.2, tile_cells=32)


@pytest.mark.parametrize("settings", [SMALL, FINE, COARSE], ids=["small", "fine", "coarse"])
def test_after_thousands_of_changes_a_site_equals_one_made_afresh(settings):
    rng = np.random.default_rng(7)
    model = declared(SiteModel(settings))
    for step in range(1000):
        change(model, rng)
        if rng.random() < 0.6:
            model.publish()
            model.release_before(model.revision - int(rng.integers(3)))
        if step % 100 == 99:
            snapshot = model.publish()
            assert read_all(snapshot) == read_all(copy_of(model, snapshot).publish())


def test_ground_that_nobody_spoke_of_blocks_if_a_layer_says_so():
    """The layer comes late, and what was known stays known."""
    rng = np.random.default_rng(3)
    model = declared(SiteModel(SMALL))
    for _ in range(60):
        change(model, rng)
    model.publish()
    model.declare("seen", LayerSettings(unknown_blocks=True))
    model.patch("seen", (-1.0, 2.0), 0.1, np.zeros((30, 40), np.uint8))
    for _ in range(60):
        change(model, rng)
    snapshot = model.publish()
    assert read_all(snapshot) == read_all(copy_of(model, snapshot).publish())
