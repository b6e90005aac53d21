import mne
import numpy as np
import pytest
from onbin import drawing, figures

CONDITIONS = ["watch_left", "rest"]


def png_size(path):
    """Width and height in pixels, as a PNG's header has them (ISO/IEC 15948)."""
    header = path.read_bytes()[:24]
    assert header[:8] == b"\x89PNG\r\n\x1a\n"
    return int.from_bytes(header[16:20]), int.from_bytes(header[20:24])


def texts(figure):
    import matplotlib.text

    return [text.get_text() for text in figure.findobj(matplotlib.text.Text)]


def quality(people):
    return [
        figures.Quality(
            participant=f"sub-{number}",
            in_study=number != 1,
            windows={"watch_left": (3, 20)} if number else {"watch_left": (20, 20), "rest": (6, 6)},
            bad_share=0.1,
            removed={"eye": 2} if number else {},
        )
        for number in range(people)
    ]


def people_rows(people):
    return [
        {
            "tag": "left",
            "condition": condition,
            "role": role,
            "participant": f"sub-{number}",
            "in_study": number != 1,
            "amplitude_uv": 1.0 + number,
            "amplitude_low_uv": 0.5 + number,
            "amplitude_high_uv": np.nan if number == 0 else 1.5 + number,
        }
        for condition, role in zip(CONDITIONS, (figures.ATTENDED, figures.STILL), strict=True)
        for number in range(people)
    ]


def test_same_figure_has_the_same_bytes(tmp_path):
    for name in ("first", "second"):
        drawing.save(figures.note("nothing to draw"), tmp_path / f"{name}.png")
    first, second = ((tmp_path / f"{n}.png").read_bytes() for n in ("first", "second"))
    assert first == second
    assert b"tEXt" not in first  # neither date nor version of a library


@pytest.mark.parametrize("people", [1, 3, 60])
def test_quality_has_a_row_for_everybody(people, tmp_path):
    figure = figures.quality(quality(people), {"watch_left": 4, "rest": 3}, max_bad_share=0.25)
    shown = texts(figure)
    assert {f"sub-{n}" for n in range(people) if n != 1} <= set(shown)
    assert "20/20" in shown
    if people > 1:
        assert "sub-1 (set aside)" in shown
        assert "3/20 !" in shown  # fewer than the four asked for
        assert "none" in shown  # no window of the other condition
    drawing.save(figure, tmp_path / "quality.png")
    width, height = png_size(tmp_path / "quality.png")
    assert width == round(drawing.WIDTH_IN * drawing.RESOLUTION_DPI)
    assert height / people > 0.2 * drawing.RESOLUTION_DPI  # room for a line of text each


def test_responses_show_everybody_and_the_mean_of_the_study():
    figure = figures.responses(people_rows(3))
    (axes,) = figure.axes
    markers = [
        (float(line.get_ydata()[0]), line.get_markerfacecolor())
        for line in axes.lines
        if line.get_marker() != "None" and len(line.get_xdata()) == 1
    ]
    assert sorted(y for y, _ in markers) == [1, 1, 2, 2, 3, 3]
    assert {y for y, face in markers if face == "white"} == {2}  # sub-1 is set aside
    (_, mean_uv), _ = axes.collections[0].get_segments()[0]
    assert mean_uv == 2  # of 1 and 3 µV
    legend = [text.get_text() for text in figure.legends[0].get_texts()]
    assert legend == ["flickers, attended", "does not flicker", "set aside", legend[-1]]


def test_bins_show_means_and_mark_what_is_left_out():
    hood = figures.Neighbourhood(
        tag="left",
        condition="watch_left",
        role=figures.FLICKERS,
        frequencies_hz=np.array([14.4, 13.6, 14.0, 14.8]),
        used=np.array([False, True, False, True]),
        amplitude_uv=np.array([[2.0, 0.2, 1.0, 0.2], [4.0, 0.4, 1.0, 0.2]]),
        evoked=True,
    )
    figure = figures.bins([hood])
    (axes,) = figure.axes
    beside, centre = axes.collections
    tops = [segment[1].tolist() for segment in beside.get_segments()]
    np.testing.assert_allclose(tops, [[13.6, 0.3], [14.8, 0.2]], rtol=1e-12)
    np.testing.assert_allclose(centre.get_segments()[0][1], [14.4, 3.0], rtol=1e-12)
    crosses = [line for line in axes.lines if line.get_marker() == "x"]
    np.testing.assert_allclose(crosses[0].get_xydata(), [[14.0, 1.0]], rtol=1e-12)
    low, high = axes.get_ylim()
    assert low == 0
    assert high > 4  # the largest person is not cut off


def test_channels_without_position_are_on_no_map():
    info = mne.create_info(["Oz", "O1", "O2", "Pz", "X1"], 250.0, "eeg")
    info.set_montage("colin27_1005", on_missing="ignore")
    assert figures.placed(info) == ["Oz", "O1", "O2", "Pz"]
    values = {name: float(index) for index, name in enumerate(info.ch_names)}
    rows = [figures.MapRow("left", "µV", {"watch_left": values, "rest": {}}, ["flickers", "none"])]
    figure = figures.topographies(rows, info)
    assert "no map:\nnot measured" in texts(figure)
    assert "watch left\nflickers" in texts(figure)


def test_alpha_takes_the_mean_over_people_of_the_study_on_one_grid():
    one = np.arange(0, 45, 0.5)
    other = np.arange(0, 45, 0.4999)  # of another sampling rate
    spectra = [
        figures.Spectrum("sub-1", True, "rest", one, np.full(one.shape, 10.0)),
        figures.Spectrum("sub-2", True, "rest", other, np.full(other.shape, 1000.0)),
        figures.Spectrum("sub-3", False, "rest", one, np.zeros(one.shape)),
    ]
    peaks = [
        {"in_study": True, "alpha_frequency_hz": 10.0},
        {"in_study": True, "alpha_frequency_hz": np.nan},
        {"in_study": False, "alpha_frequency_hz": 6.0},
    ]
    figure = figures.alpha(spectra, {"rest": {"lamp": 14.4}}, [8, 13], peaks)
    above, below = figure.axes
    mean = next(line for line in above.lines if line.get_linewidth() == 1.8)
    np.testing.assert_allclose(mean.get_ydata(), 20.0, rtol=1e-12)  # mean of 10 and 30 dB
    assert "lamp" in texts(figure)
    assert "2 of 3 people have a peak" in texts(figure)
    assert below.get_xlim()[0] < 6


def test_relation_shows_people_group_and_halves():
    people = [
        {"tag": "left", "participant": f"sub-{n}", "in_study": n != 1, "rho": 0.1 * n}
        for n in range(3)
    ]
    group = [{"tag": "left", "rho_mean": 0.1, "rho_low": -0.1, "rho_high": 0.3}]
    halves = [
        {"tag": "left", "in_study": True, "little_uv": 1.0, "much_uv": 3.0},
        {"tag": "left", "in_study": False, "little_uv": 9.0, "much_uv": 9.0},
    ]
    left, right = figures.relation(people, group, halves).axes
    assert [0.1] in [line.get_ydata().tolist() for line in left.lines if line.get_marker() == "D"]
    mean = next(line for line in right.lines if line.get_linewidth() == 2.2)
    assert mean.get_ydata().tolist() == [1.0, 3.0]


def test_long_names_take_two_lines():
    assert figures._two_lines("rest") == "rest"
    assert figures._two_lines("watching_the_left_panel") == "watching the\nleft panel"
