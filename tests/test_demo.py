"""The demo dataset: valid, reproducible, and truthful about what was planted."""

import json
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

DEMO = Path(__file__).resolve().parents[1] / "demo_bids"
sys.path.insert(0, str(DEMO / "code"))

import demo_signals as signals  # noqa: E402
import make_demo as program  # noqa: E402

WINDOW = 500  # 2.5 s at 200 Hz: 36 and 45 cycles of the nominal tags
CLEAN = ("01", "02", "03", "04", "05", "07", "08")  # all but the one who moves


def person(label):
    return next(p for p in signals.PEOPLE if p.label == label)


def truth(label, root=DEMO):
    return json.loads((root / program.TRUTH / f"sub-{label}.json").read_text())


def read_counts(label, root=DEMO):
    path = root / f"sub-{label}/eeg/sub-{label}_task-panels_eeg.eeg"
    return np.fromfile(path, "<i2").reshape(-1, len(signals.CHANNELS)).astype(int)


def read_events(label, root=DEMO):
    path = root / f"sub-{label}/eeg/sub-{label}_task-panels_events.tsv"
    rows = [line.split("\t") for line in path.read_text().splitlines()[1:]]
    return [(round(float(onset) * signals.RATE_HZ), kind) for onset, _, kind in rows]


def relative_paths(root):
    return sorted(
        path.relative_to(root)
        for path in root.rglob("*")
        if path.is_file() and "__pycache__" not in path.parts
    )


def projections(signal_uv, onsets, frequency_hz):
    """Complex amplitudes by window, their phase counted from the trial's onset: (K, n_channels)."""
    time_s = np.arange(3 * WINDOW) / signals.RATE_HZ
    turns = 2 * np.pi * frequency_hz * time_s.reshape(3, 1, WINDOW)
    n_channels = len(signal_uv)
    found = []
    for onset in onsets:
        windows = signal_uv[:, onset : onset + 3 * WINDOW].reshape(n_channels, 3, WINDOW)
        windows = (windows - windows.mean(axis=2, keepdims=True)).swapaxes(0, 1)
        real, imaginary = (windows * np.cos(turns)).sum(2), (windows * np.sin(turns)).sum(2)
        found.append(2 / WINDOW * (real - 1j * imaginary))
    return np.concatenate(found)


@pytest.fixture(scope="module")
def brains():
    """All people without artifacts."""
    return {p.label: signals.simulate(p, program.TRIALS, False) for p in signals.PEOPLE}


def planted_mean(term, condition):
    return np.array(term[condition]["amplitude_uv"]) * np.exp(
        1j * np.array(term[condition]["phase_rad"])
    )


class TestDataset:
    def test_official_validator_finds_no_error(self):
        beside = Path(sys.executable).with_name("bids-validator-deno")
        command = str(beside) if beside.exists() else shutil.which("bids-validator-deno")
        if command is None:
            pytest.skip("bids-validator-deno is not installed")
        done = subprocess.run(
            [command, str(DEMO), "--format", "json"], capture_output=True, text=True, check=False
        )
        issues = json.loads(done.stdout)["issues"]["issues"]
        assert [issue for issue in issues if issue["severity"] == "error"] == []
        assert done.returncode == 0

    def test_is_small(self):
        sizes = {path: (DEMO / path).stat().st_size for path in relative_paths(DEMO)}
        assert sum(sizes.values()) < 20e6
        assert sum(n for path, n in sizes.items() if path.parts[0] == "sourcedata") < 300e3

    def test_fresh_run_gives_the_committed_files(self, tmp_path):
        """Byte for byte, but for the last bit of FFT and matrix product of another build.

        Such a bit can move a sample across a rounding edge (1 count = 0.1 µV) or flip the last
        digit of a number in the truth.
        """
        program.make_dataset(tmp_path, n_people=1)
        made = [path for path in relative_paths(tmp_path) if path.name != "participants.tsv"]
        assert set(made) <= set(relative_paths(DEMO))
        different = [p for p in made if (tmp_path / p).read_bytes() != (DEMO / p).read_bytes()]
        assert {path.name for path in different} <= {"sub-01_task-panels_eeg.eeg", "sub-01.json"}
        difference = abs(read_counts("01", tmp_path) - read_counts("01"))
        assert difference.max() <= 1
        assert np.mean(difference > 0) < 1e-3
        fresh, committed = truth("01", tmp_path)["response"], truth("01")["response"]
        for name, condition in ((n, c) for n in fresh for c in ("watch_left", "watch_right")):
            np.testing.assert_allclose(
                planted_mean(fresh[name], condition),
                planted_mean(committed[name], condition),
                rtol=0,
                atol=1e-3,  # the truth is rounded to 1e-4 µV and 1e-4 rad
            )

    def test_two_runs_are_identical(self, tmp_path):
        for folder in ("a", "b"):
            program.make_dataset(tmp_path / folder, n_people=2, n_trials=2)
        paths = relative_paths(tmp_path / "a")
        assert paths == relative_paths(tmp_path / "b")
        for path in paths:
            assert (tmp_path / "a" / path).read_bytes() == (tmp_path / "b" / path).read_bytes()

    @pytest.mark.filterwarnings("ignore:Unable to map the following column:RuntimeWarning")
    def test_reference_reader_agrees(self):
        """mne-bids finds the samples, positions, bad channels and events that were written."""
        from mne_bids import BIDSPath, read_raw_bids

        path = BIDSPath(subject="02", task="panels", datatype="eeg", root=DEMO)
        raw = read_raw_bids(path, verbose="error")
        np.testing.assert_allclose(
            raw.get_data() * 1e7,
            read_counts("02").T,
            rtol=0,
            atol=1e-3,  # of a count
        )
        assert raw.info["bads"] == ["F7"]
        assert raw.info["line_freq"] == 50
        assert raw.annotations.onset.size == len(read_events("02")) == 22
        positions, _ = signals.electrodes()
        for channel in raw.info["chs"]:
            np.testing.assert_allclose(
                channel["loc"][:3],
                positions[channel["ch_name"]],
                rtol=0,
                atol=1e-5,  # written to 0.01 mm
            )

    def test_markers_agree_with_events(self):
        for p in signals.PEOPLE:
            path = DEMO / f"sub-{p.label}/eeg/sub-{p.label}_task-panels_eeg.vmrk"
            markers = [line for line in path.read_text().splitlines() if "=Stimulus" in line]
            found = [
                (int(m.split(",")[2]) - 1, int(m.split(",")[1].removeprefix("S"))) for m in markers
            ]
            expected = [(at, program.MARKER_CODES[kind]) for at, kind in read_events(p.label)]
            assert found == expected

    def test_does_not_mix_with_other_people(self, tmp_path):
        program.make_dataset(tmp_path, n_people=2, n_trials=2)
        with pytest.raises(ValueError, match="already holds sub-02"):
            program.make_dataset(tmp_path, n_people=1, n_trials=2)

    def test_command_line_makes_a_smaller_variant(self, tmp_path, monkeypatch):
        arguments = ["--people", "2", "--trials", "4", "--artifacts", "off"]
        monkeypatch.setattr(sys, "argv", ["make_demo.py", "--out", str(tmp_path), *arguments])
        program.main()
        assert sorted(path.name for path in tmp_path.glob("sub-*")) == ["sub-01", "sub-02"]
        assert sorted(kind for _, kind in read_events("02", tmp_path)) == (
            ["rest_closed", "rest_open", *["watch_left"] * 2, *["watch_right"] * 2]
        )
        assert "artifacts" not in truth("02", tmp_path)
        channels = tmp_path / "sub-02/eeg/sub-02_task-panels_channels.tsv"
        assert "bad" not in channels.read_text()


class TestTruth:
    @pytest.mark.parametrize("label", [p.label for p in signals.PEOPLE])
    def test_committed_truth_is_that_of_the_signals(self, label, brains):
        written, made = truth(label), program.plain(brains[label].truth)
        del written["artifacts"]
        assert written.keys() == made.keys()
        for name, term in made["response"].items():
            for condition in ("watch_left", "watch_right"):
                np.testing.assert_allclose(
                    planted_mean(written["response"][name], condition),
                    planted_mean(term, condition),
                    rtol=0,
                    atol=1e-3,  # rounded to 1e-4 µV and 1e-4 rad
                )
        assert written["trials"] == made["trials"]

    @pytest.mark.parametrize("label", ["01", "05", "07"])
    def test_response_alone_has_the_planted_means(self, label):
        """Without any noise, a joint least-squares fit of all terms returns the truth."""
        p = person(label)
        blocks = signals.make_blocks(p, program.TRIALS)
        traits = signals.draw_traits(signals.stream(p, "traits"))
        topographies = signals.draw_topographies(traits, signals.stream(p, "topographies"))
        signal = signals.response(
            blocks, blocks[-1].stop, p.refresh_hz, topographies, traits.watched_factor
        )
        planted = truth(label)["response"]
        time_s = np.arange(3 * WINDOW) / signals.RATE_HZ
        phases = 2 * np.pi * np.outer(time_s, [t["frequency_hz"] for t in planted.values()])
        design = np.hstack([np.cos(phases), -np.sin(phases)])
        for condition in ("watch_left", "watch_right"):
            onsets = [at for at, kind in read_events(label) if kind == condition]
            mean = np.mean([signal[:, at : at + 3 * WINDOW] for at in onsets], axis=0)
            real, imaginary = np.split(np.linalg.lstsq(design, mean.T)[0], 2)
            for row, term in zip(real + 1j * imaginary, planted.values(), strict=True):
                np.testing.assert_allclose(
                    row,
                    planted_mean(term, condition),
                    rtol=0,
                    atol=1e-3,  # rounded to 1e-4 µV and 1e-4 rad
                )

    def test_data_agree_with_truth_within_noise(self, brains):
        """T²circ (Victor & Mast 1991) of measured minus planted: K·T² ~ F(2, 2K-2).

        The limit is that of one false alarm in a thousand runs of the whole comparison. The
        spread between windows holds the latent as well, so the test errs on the lenient side.
        """
        from scipy.stats import f as f_distribution

        ratios, n_windows = [], []
        for label, brain in brains.items():
            for condition in ("watch_left", "watch_right"):
                onsets = [at for at, kind in read_events(label) if kind == condition]
                for term in truth(label)["response"].values():
                    windows = projections(brain.signal_uv, onsets, term["frequency_hz"])
                    k = len(windows)
                    spread = (abs(windows - windows.mean(0)) ** 2).sum(0) / (k - 1)
                    error = abs(windows.mean(0) - planted_mean(term, condition)) ** 2
                    ratios.extend(k * error / spread)
                    n_windows.extend([k] * len(error))
        ratios, k = np.array(ratios), np.array(n_windows)
        assert np.all(ratios < f_distribution.isf(1e-3 / len(ratios), 2, 2 * k - 2))
        # Errors are neither too large nor suspiciously small: F has mean (K-1)/(K-2). Terms and
        # people are independent, neighbouring channels are not: about 96 x 4 independent values.
        assert np.mean(ratios) == pytest.approx(1, abs=4 / np.sqrt(96 * 4))

    @pytest.mark.parametrize("label", [p.label for p in signals.PEOPLE])
    def test_planted_sizes(self, label):
        planted = truth(label)
        region = {}
        for name, term in planted["response"].items():
            for condition in ("watch_left", "watch_right"):
                region[name, condition] = abs(signals.region_value(planted_mean(term, condition)))
        for panel, other in (("left", "right"), ("right", "left")):
            watched = region[f"{panel}_h1", f"watch_{panel}"]
            unwatched = region[f"{panel}_h1", f"watch_{other}"]
            assert 1.0 <= unwatched < watched <= 2.6
            # Amplitudes are rounded to 1e-4 µV.
            assert watched / unwatched == pytest.approx(planted["watched_factor"], abs=2e-3)
            second = region[f"{panel}_h2", f"watch_{panel}"]
            assert 0.25 < second / watched < 0.4
        for condition in ("watch_left", "watch_right"):
            g = [t["g"] for t in planted["trials"] if t["condition"] == condition and t["marked"]]
            assert np.mean(g) == pytest.approx(0, abs=1e-4)  # rounded to 1e-4
        power = planted["alpha"]["region_power_uv2"]
        # Three times the amplitude; a rest of 24 s holds about 12 independent values of a rhythm
        # of this width, so the ratio of powers scatters by a factor of about two.
        assert 4 < power["rest_closed"] / power["rest_open"] < 20
        assert 8.8 <= planted["alpha"]["frequency_hz"] <= 11.2

    def test_alpha_falls_as_the_response_rises(self, brains):
        """Spearman correlation over windows, condition-centred, of both tags, in each person."""
        from scipy.stats import spearmanr

        rows = [signals.CHANNELS.index(name) for name in signals.REGION]
        found = []
        for label in CLEAN:
            signal = brains[label].signal_uv
            region = (signal[rows].mean(axis=0) - signal.mean(axis=0))[None]
            planted = truth(label)
            alpha_hz = planted["alpha"]["frequency_hz"]
            for name in ("left_h1", "right_h1"):
                response, alpha = [], []
                for condition in ("watch_left", "watch_right"):
                    onsets = [at for at, kind in read_events(label) if kind == condition]
                    tag = projections(region, onsets, planted["response"][name]["frequency_hz"])
                    turned = (tag * np.exp(-1j * np.angle(tag.mean()))).real[:, 0]
                    bins_hz = alpha_hz + np.arange(-2, 2.1, 0.4)
                    power = sum(abs(projections(region, onsets, f)[:, 0]) ** 2 for f in bins_hz)
                    response.extend(turned - turned.mean())
                    alpha.extend(np.log(power) - np.log(power).mean())
                found.append(spearmanr(alpha, response).statistic)
        assert max(found) < 0
        assert -0.55 < np.median(found) < -0.3


class TestArtifacts:
    def test_leaving_them_out_keeps_the_brain(self, brains):
        """What artifacts add to the planted tags is little, in good posterior channels."""
        p = person("02")
        full = signals.simulate(p, program.TRIALS)
        assert full.blocks == brains["02"].blocks
        added = full.signal_uv - brains["02"].signal_uv
        onsets = [block.start for block in full.blocks if block.is_trial]
        oz = signals.CHANNELS.index("Oz")
        tag = abs(projections(added, onsets, 14.4).mean(axis=0))[oz]
        # Blinks and bursts of 60 windows: far below the 1 µV that is planted.
        assert tag < 0.1
        assert abs(added[oz]).max() > 20  # blinks, against FCz

    @pytest.mark.parametrize("label", [p.label for p in signals.PEOPLE])
    def test_bad_channels_are_as_told(self, label):
        signal_uv = read_counts(label).T * program.RESOLUTION_UV
        table = DEMO / f"sub-{label}/eeg/sub-{label}_task-panels_channels.tsv"
        rows = [line.split("\t") for line in table.read_text().splitlines()[1:]]
        told = truth(label)["artifacts"]["bad_channels"]
        assert {r[0] for r in rows if r[5] == "bad"} == {b["name"] for b in told if b["marked"]}
        steps_uv = np.diff(signal_uv, axis=1).std(axis=1)
        range_uv = np.ptp(signal_uv, axis=1)
        typical_step_uv, typical_range_uv = np.median(steps_uv), np.median(range_uv)
        flat = {name for name, r in zip(signals.CHANNELS, range_uv, strict=True) if r == 0}
        assert flat == {bad["name"] for bad in told if bad["kind"] == "flat"}
        for bad in told:
            row = signals.CHANNELS.index(bad["name"])
            if bad["kind"] == "noisy":
                assert steps_uv[row] > 5 * typical_step_uv
            elif bad["kind"] in ("drifting", "popping"):
                assert range_uv[row] > 3 * typical_range_uv
        assert not {bad["name"] for bad in told} & set(signals.REGION)

    def test_half_of_the_people_have_none(self):
        assert sum(not p.bad_channels for p in signals.PEOPLE) == 4

    def test_display_of_one_person_is_off_nominal(self, brains):
        onsets = [at for at, kind in read_events("05") if kind == "watch_left"]
        row = signals.CHANNELS.index("Oz")
        at_nominal, at_true = (
            abs(projections(brains["05"].signal_uv, onsets, f_hz).mean(axis=0)[row])
            for f_hz in (14.4, 14.32)
        )
        # Over the 7.5 s from onset the phase slips 0.6 of a turn, so the mean nearly halves.
        assert at_nominal < 0.7 * at_true
        sidecar = json.loads((DEMO / "task-panels_events.json").read_text())
        assert sidecar["StimulusPresentation"]["ScreenRefreshRate"] == 144

    def test_one_person_moves_in_most_trials(self):
        signal_uv = read_counts("06").T * program.RESOLUTION_UV
        trials = [at for at, kind in read_events("06") if kind.startswith("watch")]
        starts = [at + shift for at in trials for shift in range(0, 3 * WINDOW, WINDOW)]
        swing_uv = np.array([np.ptp(signal_uv[:, at : at + WINDOW], axis=1) for at in starts])
        assert (np.median(swing_uv, axis=1) < 300).sum() == 6  # two trials of three windows

    def test_one_person_lost_markers(self):
        planted = truth("07")["trials"]
        assert sum(not trial["marked"] for trial in planted) == 5
        kept = [round(t["onset_s"] * signals.RATE_HZ) for t in planted if t["marked"]]
        assert [at for at, kind in read_events("07") if kind.startswith("watch")] == kept

    def test_blinks_are_where_told(self):
        signal_uv = read_counts("01").T * program.RESOLUTION_UV
        frontal = signal_uv[[signals.CHANNELS.index(name) for name in ("Fp1", "Fp2")]].mean(axis=0)
        peaks_s = truth("01")["artifacts"]["blink_peaks_s"]
        peaks = np.array([round(at * signals.RATE_HZ) for at in peaks_s])
        heights_uv = frontal[peaks] - (frontal[peaks - 40] + frontal[peaks + 70]) / 2
        assert len(peaks) > 20
        assert 120 < np.median(heights_uv) < 280


def test_unknown_fault_is_refused():
    with pytest.raises(ValueError, match="no kind of bad channel"):
        signals.spoil(np.zeros(10), "loose", np.random.default_rng(1))


def test_signal_too_large_for_16_bits_is_refused():
    with pytest.raises(ValueError, match="do not fit"):
        program.counts(np.full((24, 3), 4000.0))


def test_latent_scores_are_balanced():
    scores = signals.balanced_scores(9, np.random.default_rng(3))
    assert scores.mean() == pytest.approx(0, abs=1e-15)  # rounding of a sum of nine
    assert scores.std() == pytest.approx(1, rel=1e-12)


def test_coloured_noise_has_its_exponent():
    noise = signals.coloured_noise((400, 2000), 1.5, 0.5, np.random.default_rng(5))
    power = (abs(np.fft.rfft(noise)) ** 2).mean(axis=0)
    freqs_hz = np.fft.rfftfreq(2000, 1 / signals.RATE_HZ)
    band = (freqs_hz > 1) & (freqs_hz < 90)
    slope = np.polyfit(np.log(freqs_hz[band]), np.log(power[band]), 1)[0]
    # 890 bins, each scattering by 1/sqrt(400): the slope's error is about 0.003.
    assert slope == pytest.approx(-1.5, abs=0.015)
