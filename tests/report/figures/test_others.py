"""Direction map, posterior, mass and station figures: structure and labels."""

from types import SimpleNamespace

import numpy as np
import pytest
from astropy import units as u

from ngbound.errors import LimitError, MassError
from ngbound.limits import detection_threshold, sample_posterior, upper_limit
from ngbound.mass import Outgassing, Photometry, reach
from ngbound.report import (
    direction_map,
    mass_figure,
    posterior_figure,
    reach_figure,
    residual_by_station,
)
from ngbound.report.figures import style
from tests.report.standins import archive_pair, demo_pair


def texts(fig) -> str:
    return " ".join(t.get_text() for owner in (fig, *fig.axes) for t in owner.texts)


@pytest.mark.parametrize("pair", [demo_pair, archive_pair])
def test_direction_map(pair):
    fig = direction_map(detection_threshold(pair()[1]))
    fig.canvas.draw()
    assert fig.axes[0].name == "mollweide"
    assert {"R", "T", "N", "\u2212R", "\u2212T", "\u2212N"} <= set(texts(fig).split())
    assert "95 %" in texts(fig) and "best" in texts(fig)
    assert "threshold" in fig.axes[1].get_xlabel() and "au d" in fig.axes[1].get_xlabel()
    labels = [t.get_text() for t in fig.axes[1].get_xticklabels()]
    assert 3 <= len(labels) <= 9 and len(set(labels)) == len(labels)


def test_the_map_grows_darker_as_the_threshold_grows_so_that_it_survives_in_grey():
    grey = style.MAP_RAMP(np.linspace(0, 1, 64))[:, :3] @ [0.299, 0.587, 0.114]
    assert np.all(np.diff(grey) < 0.0)


def without(push, keep: str):
    """The same fit with fewer thrust components."""
    chosen = [*range(6), *(6 + "RTN".index(c) for c in keep)]
    normal = push.normal[np.ix_(chosen, chosen)]
    return SimpleNamespace(
        components=keep,
        n_state=6,
        normal=normal,
        theta=push.theta[chosen],
        chi2=push.chi2,
        dof=push.dof,
        names=tuple(push.names[i] for i in chosen),
    )


def test_direction_map_of_two_and_one_components():
    push = demo_pair()[1]
    fig = direction_map(detection_threshold(without(push, "RT")))
    assert fig.axes[0].get_yscale() == "log" and "radial" in fig.axes[0].get_xlabel()
    with pytest.raises(LimitError, match="two or three"):
        direction_map(detection_threshold(without(push, "T")))


def test_posterior_figure():
    push = demo_pair()[1]
    post = sample_posterior(push, seed=1, target_ess=300.0)
    fig = posterior_figure(post, upper_limit(post))
    fig.canvas.draw()
    assert len(fig.axes) == 4
    assert "A_R" in fig.axes[0].get_xlabel() and "|A|" in fig.axes[3].get_xlabel()
    assert "isotropic-uniform" in texts(fig) and "flat-components" in texts(fig)


def a_bound(**more):
    rng = np.random.default_rng(4)
    shares = tuple(
        SimpleNamespace(name=n, mass_at_low=a, mass_at_high=b, total=t)
        for n, a, b, t in (("acceleration", 2e11, 2e10, 0.8), ("collimation", 3e10, 7e10, 0.2))
    )
    known = {
        "mass_draws_kg": 5e10 * np.exp(rng.standard_normal(4000)),
        "mass": 8e9 * u.kg,
        "diameter": 310 * u.m,
        "confidence": 0.95,
        "inputs": shares,
        "mass_detection": 1e9 * u.kg,
    }
    return SimpleNamespace(**{**known, **more})


def test_mass_figure():
    fig = mass_figure(a_bound())
    fig.canvas.draw()
    assert len(fig.axes) == 2 and fig.axes[0].get_xscale() == "log"
    assert "310 m" in texts(fig) and "95 %" in texts(fig) and "80 %" in texts(fig)
    assert len(mass_figure(a_bound(inputs=())).axes) == 1
    with pytest.raises(MassError, match="at least 100"):
        mass_figure(a_bound(mass_draws_kg=np.ones(5)))


def test_residual_by_station():
    fig = residual_by_station(archive_pair()[0], most=10)
    fig.canvas.draw()
    catalogues = [t.get_text() for t in fig.axes[0].get_yticklabels()]
    assert "USNOA2" in catalogues
    assert len(fig.axes[2].get_yticklabels()) == 10
    assert "not shown" in texts(fig)
    for ax in fig.axes:
        for label in ax.get_yticklabels():
            assert label.get_window_extent().x0 >= 0.0


def test_reach_figure():
    budget = Outgassing(
        {"H2O": "(3.0 +- 0.8)e26 1/s", "CO": "< 1e26 1/s", "dust": "5 kg/s"},
        {"dust": "5 m/s"},
        at=1.25,
    )
    found = reach(3e-9, g_at=lambda r: r**-2, outgassing=budget, size=Photometry("17.4 +- 0.2"))
    fig = reach_figure(found)
    fig.canvas.draw()
    assert [ax.get_title(loc="left") for ax in fig.axes] == [
        "H$_{2}$O at 1.25 au",
        "CO at 1.25 au",
        "dust at 1.25 au",
    ]
    assert {"measured", "upper limit", "unseen"} <= {
        t.get_text() for a in fig.axes for t in a.texts
    }
    assert fig.axes[0].get_xscale() == fig.axes[0].get_yscale() == "log"
    one = reach_figure(reach(3e-9, g_at=lambda r: r**-2, at=1.25, species=("H2O",)))
    assert len(one.axes) == 1 and "revealed" in texts(one)


def test_mass_figure_with_a_ceiling():
    fig = mass_figure(a_bound(), SimpleNamespace(mass=9.11e11 * u.kg, confidence=0.95))
    fig.canvas.draw()
    assert "9.2\u2009\u00d7\u200910\u00b9\u00b9 kg" in texts(fig)
    assert fig.axes[0].get_xlim()[1] > 9.11e11
