import numpy as np
import pytest

from ramulus.image.grid import working_grid
from ramulus.plan import plan_of


@pytest.mark.parametrize(
    ("shape", "spacing_um"),
    [
        ((5, 6, 7), (1.0, 1.0, 1.0)),
        ((5, 6, 7), (1.7, 1.0, 1.0)),
        ((5, 6, 7), (3.0, 1.0, 1.0)),
        ((5, 6, 7), (20.0, 1.0, 2.5)),
        ((5, 1, 7), (1.0, 3.0, 1.0)),
    ],
)
def test_the_planned_grid_is_the_one_worked_on(shape, spacing_um):
    fine, _, _ = working_grid(np.zeros(shape), spacing_um=spacing_um)
    assert plan_of(shape, spacing_um, 8).grid == fine.shape


def test_shares_rise_over_the_stages_and_end_below_one():
    plan = plan_of((64, 256, 256), (1.0, 1.0, 1.0), 1)
    shares = [plan.share_before(stage) for stage in plan.seconds]
    assert shares[0] == 0.0
    assert shares == sorted(shares)
    assert shares[-1] < 1.0
    assert plan.share_before("unheard of") == 0.0


def test_stages_left_out_take_no_time():
    whole = plan_of((64, 64, 64), (1.0, 1.0, 1.0), 1)
    less = plan_of((64, 64, 64), (1.0, 1.0, 1.0), 1, without=["twin", "report"])
    assert whole.total_seconds - less.total_seconds == pytest.approx(
        whole.seconds["twin"] + whole.seconds["report"]
    )
    assert list(whole.only(["network"]).seconds) == ["network"]


def test_a_larger_stack_takes_more():
    small, large = (plan_of((n, n, n), (1.0, 1.0, 1.0), 2) for n in (64, 512))
    assert large.total_seconds > small.total_seconds
    assert large.memory_gib > small.memory_gib > 0.2
