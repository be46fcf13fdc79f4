"""What a build is said to need: it grows with what is asked for, and a limit is met by spilling or refused."""

from __future__ import annotations

import pytest

from tilemap.budget import PROCESS, chunk_size, make_budget
from tilemap.project.scatter import make_plan

GIB = 1 << 30


def budget(particles=10_000_000, pixels=8192, slabs=1, channels=1, workers=2, limit=None, neighbours=False, copies=1.0):
    plan = make_plan(pixels, pixels, slabs)
    return make_budget(plan, particles, channels, 0, 1, workers, limit, chunk_size(limit), neighbours, copies)


@pytest.mark.parametrize("more", [{"particles": 10**8}, {"channels": 3}, {"copies": 4.0}, {"slabs": 8}])
def test_more_of_anything_needs_more_scratch(more):
    assert budget(limit=GIB, **more).scratch > budget(limit=GIB).scratch


def test_particles_wait_in_memory_where_they_fit_and_on_scratch_disk_where_they_do_not():
    assert budget(limit=4 * GIB).held
    assert not budget(particles=10**9, limit=4 * GIB).held
    assert budget(particles=10**9, limit=None).held


@pytest.mark.parametrize("limit", [GIB, 2 * GIB, 4 * GIB, 16 * GIB])
@pytest.mark.parametrize("particles", [10**6, 10**8, 10**11])
def test_the_peak_is_within_a_limit_of_a_gibibyte_and_more_however_many_particles(limit, particles):
    assert budget(particles=particles, limit=limit).peak <= limit


def test_chunks_depend_on_nothing_but_the_limit():
    assert chunk_size(None) == chunk_size(8 * GIB) == 1 << 20
    assert (1 << 16) <= chunk_size(GIB) < 1 << 20
    assert chunk_size(1) == 1 << 16


def test_spilled_records_and_neighbours_are_counted_as_scratch():
    plain = budget(particles=10**8, limit=GIB)
    assert plain.scratch > 10**8 * 16
    assert budget(particles=10**8, limit=GIB, neighbours=True).scratch > plain.scratch + 10**8 * 40
    assert plain.peak > PROCESS
