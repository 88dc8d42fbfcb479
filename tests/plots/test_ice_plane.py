"""The picture of the plane of red and infrared albedo."""

import matplotlib as mpl
import numpy as np
import pytest

import bandratio as br

mpl.use("Agg")
LIST = {"soil": (0.15981, 0.26907), "ilmenite": (0.0553, 0.0599)}


@pytest.fixture
def scene():
    rng = np.random.default_rng(0)
    measured = np.array([0.15, 0.25]) * (1 + 0.03 * rng.standard_normal((5000, 2)))
    measured[:50] = 0.5, 0.1
    measured[50:60] = 0.4, np.nan
    return measured.T


@pytest.mark.parametrize("ground", [{"ice_free": LIST}, {"ice_free_ratio": 0.9}])
def test_the_picture_shows_hull_ices_and_candidates(scene, ground):
    flags = br.ice_flags(
        *scene, 0.002, 0.002, relative_red=0.03, relative_infrared=0.03, infrared_limit=0.02, **ground
    )
    ax = br.plot_ice_plane(flags, *scene)
    told = [text.get_text() for text in ax.get_legend().get_texts()]
    assert "ice candidate (50)" in told
    assert "ice candidate, infrared dropout (10)" in told
    assert ("pure ices" in told) == ("ice_free" in ground)
    assert "never proof" in ax.get_legend().get_title().get_text()
    assert ax.get_xlabel() == "albedo at 640 nm"
    left, right = ax.get_xlim()
    assert left < 0.4 < right
    assert "± 5 σ of a typical shot" in [text.get_text() for text in ax.texts]
    mpl.pyplot.close(ax.figure)


@pytest.mark.parametrize("height", [3.5, 1.5])
def test_every_ice_is_in_view(scene, height):
    """In a small picture beside the data, or in the one view of axes that are too low for two."""
    from matplotlib.figure import Figure

    flags = br.ice_flags(*scene, 0.002, 0.002, ice_free=LIST)
    ax = br.plot_ice_plane(flags, *scene, ax=Figure().add_axes((0.1, 0.1, 0.5, height / 4.8)))
    views = [ax, *ax.figure.axes[1:], *ax.child_axes]
    assert len(views) == (2 if height > 3 else 1)
    assert views[-1].get_xlim()[1] > max(flags.attrs["ice_red"])
    assert views[-1].get_ylim()[1] > max(flags.attrs["ice_infrared"])
    assert (ax.get_xlim()[1] < max(flags.attrs["ice_red"])) == (height > 3)


def test_it_draws_on_given_axes_and_names_bad_input(scene):
    from matplotlib.figure import Figure

    flags = br.ice_flags(*scene, 0.002, 0.002, ice_free=LIST)
    ax = Figure().subplots()
    assert br.plot_ice_plane(flags, *scene, ax=ax) is ax
    with pytest.raises(ValueError, match="red must have the shape of the flags"):
        br.plot_ice_plane(flags, scene[0][:3], scene[1])
    with pytest.raises(ValueError, match="with its variable flag"):
        br.plot_ice_plane(flags[["ratio"]], *scene)
