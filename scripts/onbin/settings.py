"""The settings of a study: one typed model that checks them before anything runs.

Descriptions, units and defaults stand here and nowhere else; the JSON Schema for editors is made
from this module.
"""

import difflib
import json
import re
import unicodedata
from collections.abc import Hashable, Iterator, Mapping
from fractions import Fraction
from itertools import islice
from pathlib import Path
from typing import Annotated, Any, Literal

import yaml
from pydantic import AfterValidator, BaseModel, ConfigDict, Field, ValidationError, model_validator

from onbin import plan, tagging
from onbin.errors import SettingsError

# No length, frequency or amplitude of such a study is larger; beyond it, sums take for ever.
LARGEST = 1_000_000
MOST_ENTRIES = 20_000  # of a settings file, aliases written out
MOST_CHARACTERS = 1_000_000  # of a settings file; YAML is read slowly

Label = Annotated[str, Field(pattern=r"^[a-z][a-z0-9_]*$")]
Share = Annotated[float, Field(ge=0, le=1)]
Positive = Annotated[float, Field(gt=0, le=LARGEST)]
NotNegative = Annotated[float, Field(ge=0, le=LARGEST)]
Count = Annotated[int, Field(ge=1, le=LARGEST)]


def _rising(pair: list[float]) -> list[float]:
    if pair[0] >= pair[1]:
        raise ValueError(f"the second number must be larger than the first, found {pair}")
    return pair


def _exact_number(value: int | float | str) -> int | float | str:
    written = not isinstance(value, str) or re.fullmatch(r"[0-9]{1,15}([./][0-9]{1,15})?", value)
    low_hz, high_hz = plan.FREQUENCY_HZ
    try:
        usable = bool(written) and tagging.exact(low_hz) <= tagging.exact(value) <= high_hz
    except (ValueError, ZeroDivisionError):
        usable = False
    if not usable:
        raise ValueError(
            f"must be a positive number or ratio such as 120/7, from {low_hz:g} to {high_hz:g}, "
            f"found {_shown(value)}"
        )
    return value


Interval = Annotated[list[Positive], Field(min_length=2, max_length=2), AfterValidator(_rising)]
ExactNumber = Annotated[
    int | float | str,
    Field(description="a number, or a ratio such as 120/7"),
    AfterValidator(_exact_number),
]


def _plain_path(path: str) -> str:
    if not path.strip() or set(path) & set("{}\t\n") or path.startswith("~"):
        raise ValueError(
            "must be a path without braces and line ends, with the home folder written out in "
            f"place of ~, found {_shown(path)}"
        )
    return path


PlainPath = Annotated[str, AfterValidator(_plain_path)]
ComponentClass = Literal["muscle", "eye", "heart", "line noise", "channel noise", "other"]


class Part(BaseModel):
    """A part of the settings: no unknown keys, no silent conversion."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True, allow_inf_nan=False)


class Study(Part):
    """What the study is called."""

    title: str = Field(description="Title of the report.")


class Dataset(Part):
    """Where recordings come from and results go."""

    folder: PlainPath = Field(description="The BIDS dataset; it is only read.")
    results: PlainPath = Field("results", description="Where everything that is made goes.")
    tasks: list[str] = Field(
        [], description="Labels of the tasks to take, without task-; empty takes all."
    )
    participants: list[str] = Field(
        [], description="Labels of the participants to take, without sub-; empty takes all."
    )
    decisions: PlainPath = Field(
        "decisions.tsv",
        description="What a person decided about recordings, channels and components: a table in "
        "the folder of the settings. It need not exist.",
    )


class Display(Part):
    """The display that showed the flicker."""

    refresh_hz: ExactNumber | None = Field(
        None, description="Refresh rate in Hz, as measured if it was: 59.94 is not 60."
    )
    size_m: Interval | None = Field(
        None, description="Width and height in m; none takes what the dataset says."
    )
    distance_m: Positive | None = Field(
        None, description="Distance from the eyes in m; none takes what the dataset says."
    )


class Adoption(Part):
    """A tag whose measured frequency is used in place of the one that was set."""

    tag: Label
    recordings: list[str] = Field(
        [],
        description="Recordings by their BIDS entities, such as sub-05 or sub-05_run-2; empty "
        "takes all.",
    )


class Flicker(Part):
    """How the true frequency of the flicker is found, and where it is used."""

    photodiode: str | None = Field(
        None, description="Channel that recorded the light or a pulse a cycle, if one did."
    )
    adopt: list[Adoption] = Field(
        [],
        description="Tags whose measured frequency is used; where it cannot be told, the one set "
        "is.",
    )


class Tag(Part):
    """A frequency tag, by frames per cycle of the display or by its frequency."""

    frames_per_cycle: Annotated[int, Field(ge=2, le=LARGEST)] | None = Field(
        None, description="Frames of the display in one cycle; needs display.refresh_hz."
    )
    frequency_hz: ExactNumber | None = Field(
        None, description="Frequency in Hz, as a number or a ratio such as 120/7."
    )
    waveform: Literal["square", "sine"] = Field(
        "square",
        description="square is on and off by whole frames; sine is luminance sampled from a sine, "
        "which needs 3 frames a cycle or more, whole or not.",
    )
    pattern_reversal: bool = Field(
        False, description="Whether it reverses a pattern, which happens twice in a cycle."
    )

    @model_validator(mode="after")
    def _one_of_two(self) -> "Tag":
        if (self.frames_per_cycle is None) == (self.frequency_hz is None):
            raise ValueError("give either frames_per_cycle or frequency_hz, not both and not none")
        return self


class Condition(Part):
    """A condition: which events belong to it and what flickers in it."""

    events: dict[str, str | Annotated[int, Field(ge=-(2**53), le=2**53)] | float] = Field(
        description="Column of events.tsv and the value that it must have; all of several. A BIDS "
        "entity (task, ses, acq, run) may stand in place of a column; entities alone make each "
        "such recording one trial.",
        min_length=1,
    )
    flickering: list[Label] = Field(
        [], description="Tags that flicker in it; empty where nothing flickers."
    )
    attended: Label | None = Field(None, description="The tag that is attended, if one is.")
    phase_locked: bool = Field(
        True, description="Whether the flicker starts at the event with always the same phase."
    )
    duration_s: Positive | None = Field(
        None, description="Length of a trial, where events.tsv does not tell."
    )


class Filter(Part):
    """Filters, all of zero phase."""

    highpass_hz: Positive = Field(
        0.5, description="Edge of the high-pass. Higher takes out more drift and slow response."
    )
    lowpass_hz: Positive | None = Field(
        None,
        description="Edge of the low-pass; none takes 100, or above the highest term where that is "
        "higher, at most 0.45 of the working rate.",
    )
    line_hz: Annotated[float, Field(ge=10, le=1000)] | None = Field(
        None, description="Frequency of the mains; none takes what the dataset says."
    )
    line_removal: Literal["fit", "notch", "none"] = Field(
        "fit", description="How mains hum is taken out: fitted and subtracted, or band-stop filter."
    )
    gain_tolerance: Share = Field(
        0.01, description="By how much the gain at a term may differ from 1 before the run stops."
    )


class Intake(Part):
    """How recordings are read."""

    working_rate_hz: Positive | None = Field(
        None,
        description="Recordings are decimated by the largest whole factor that keeps at least "
        "this rate; none takes 250, or more where the terms or the low-pass need it.",
    )


class Sensors(Part):
    """When a channel is bad, and the reference."""

    reference: Literal["average", "as_recorded"] | list[str] = Field(
        "average", description="average, as_recorded, or names of channels (linked mastoids)."
    )
    max_bad_share: Share = Field(
        0.25, description="Share of bad channels above which a recording is set aside."
    )


class Components(Part):
    """Which independent components are removed."""

    method: Literal["picard", "infomax", "fastica", "none"] = Field(
        "picard", description="ICA algorithm (extended where it can be); none leaves ICA out."
    )
    remove: dict[ComponentClass, Share] = Field(
        {"eye": 0.7, "muscle": 0.9, "channel noise": 0.9},
        description="Classes that are removed, and the least probability for it. Add heart: 0.9 "
        "where an ECG was recorded or the sheets of the components bear it out.",
    )
    max_tag_share: Share = Field(
        0.1,
        description="A component with more than this share of a tag's power is kept and flagged.",
    )


class Windows(Part):
    """How trials are cut into windows, and which windows are left out."""

    length_s: Positive = Field(
        description="Longest window of a flicker condition; it is shortened to whole cycles."
    )
    rest_length_s: Positive = Field(
        4.0, description="Length of a window where nothing flickers, at least that of the others."
    )
    skip_s: NotNegative = Field(
        0.5, description="Time left out after each onset: the transient response."
    )
    peak_to_peak_uv: Interval = Field(
        [300.0, 600.0],
        description="Bounds of the limit for a window's peak-to-peak amplitude, in µV; between "
        "them it is taken from the windows of the recording's condition.",
    )


class Response(Part):
    """What is measured at the tags."""

    harmonics: Annotated[int, Field(ge=1, le=100)] = Field(
        3, description="Harmonics of each tag, the fundamental included."
    )
    intermodulation_order: Annotated[int, Field(ge=1, le=20)] = Field(
        2, description="Largest |a| + |b| of a·f1 + b·f2; 1 measures none."
    )
    neighbours: Annotated[int, Field(ge=1, le=1000)] = Field(
        10, description="Neighbouring bins on each side, for the noise."
    )
    skip: Annotated[int, Field(ge=0, le=1000)] = Field(
        1, description="Bins left out between a term and its neighbours."
    )
    level: Annotated[float, Field(gt=0, lt=0.5)] = Field(
        0.05, description="Level of detection, after correction over channels."
    )
    correction: Literal["benjamini_hochberg", "holm"] = Field(
        "benjamini_hochberg", description="Correction of detection over channels."
    )


class Alpha(Part):
    """How alpha is measured."""

    band_hz: Interval = Field([8.0, 13.0], description="The fixed alpha band.")
    search_hz: Interval = Field(
        [7.0, 13.0], description="Where the individual alpha frequency is looked for."
    )
    half_width_hz: Positive = Field(
        2.0, description="The individual band reaches this far to each side of its frequency."
    )
    segment_s: Positive = Field(2.0, description="Segments of Welch's method.")
    grid_hz: Annotated[float, Field(ge=0.01, le=LARGEST)] = Field(
        0.25, description="Spacing of the power spectra."
    )
    frequency_from: list[Label] = Field(
        [], description="Conditions that show the individual alpha frequency; empty takes all."
    )
    region: Label = Field(description="Region over which alpha is summed up.")
    right_region: Label | None = Field(None, description="For the lateralisation.")
    left_region: Label | None = Field(None, description="For the lateralisation.")

    @model_validator(mode="after")
    def _both_sides(self) -> "Alpha":
        if (self.right_region is None) != (self.left_region is None):
            raise ValueError("lateralisation needs both right_region and left_region")
        return self


class Relation(Part):
    """How alpha and the response are related, window by window."""

    response_region: Label = Field(description="Region of the response.")
    permutations: Count = Field(2000, description="Permutations of windows within a person.")


class Trust(Part):
    """When data that can be read is not trusted."""

    min_windows: Count = Field(
        10, description="A person with fewer kept windows in a flicker condition is set aside."
    )
    min_rest_windows: Count = Field(
        3, description="The same where nothing flickers: windows are longer there and fewer."
    )


class Cell(Part):
    """One value per person in a comparison: a condition, and for responses a tag."""

    condition: Label
    tag: Label | None = None


class Comparison(Part):
    """A planned comparison: mean of ``plus`` less mean of ``minus``."""

    measure: Literal[
        "amplitude_uv",
        "amplitude_corrected_uv",
        "amplitude_sum_uv",
        "snr_db",
        "alpha_power_db",
        "alpha_power_uv2",
        "alpha_lateralisation",
    ]
    region: Label
    term: str = Field("1f", description="Term of the response, such as 1f or 2f.")
    plus: list[Cell] = Field(min_length=1)
    minus: list[Cell] = Field([], description="Empty compares with zero.")
    groups: list[str] | None = Field(
        None,
        description="Column of participants.tsv and its two values; compares the first group with "
        "the second.",
        min_length=3,
        max_length=3,
    )
    covariate: str | None = Field(
        None, description="Column of participants.tsv that the difference is correlated with."
    )


class Settings(Part):
    """Everything that a person decides about a study before it runs."""

    study: Study
    dataset: Dataset
    display: Display = Display()
    flicker: Flicker = Flicker()
    tags: dict[Label, Tag] = Field({}, description="Frequency tags by name.")
    conditions: dict[Label, Condition] = Field(min_length=1, description="Conditions by name.")
    regions: dict[Label, Annotated[list[str], Field(min_length=1)]] = Field(
        min_length=1, description="Regions by name: lists of channels."
    )
    intake: Intake = Intake()
    filter: Filter = Filter()
    sensors: Sensors = Sensors()
    components: Components = Components()
    windows: Windows
    response: Response = Response()
    alpha: Alpha
    relation: Relation
    trust: Trust = Trust()
    comparisons: dict[Label, Comparison] = Field({}, description="Planned comparisons by name.")
    leave_out_failed: bool = Field(
        False,
        description="Whether recordings of which a step failed are left out, so that the study is "
        "made from the rest. Meant for the command line: --config leave_out_failed=true.",
    )
    seed: Annotated[int, Field(ge=0, lt=2**32)] = Field(
        20261201, description="Seed of everything that draws random numbers."
    )

    @property
    def tag_frequencies(self) -> dict[str, Fraction]:
        """Exact frequency of each tag in Hz."""
        return {
            name: tagging.tag_frequency(
                self.display.refresh_hz, tag.frames_per_cycle, tag.frequency_hz
            )
            for name, tag in self.tags.items()
        }


# --- reading -------------------------------------------------------------------------------------


class _Loader(yaml.SafeLoader):
    """Safe YAML without duplicate keys."""


def _mapping_without_duplicates(loader: _Loader, node: yaml.MappingNode) -> dict:
    seen = set()
    for key_node, _ in node.value:
        if key_node.tag == "tag:yaml.org,2002:merge":
            continue
        key = loader.construct_object(key_node, deep=True)
        if not isinstance(key, Hashable):
            raise yaml.constructor.ConstructorError(
                None, None, "a key must be a word", key_node.start_mark
            )
        if key in seen:
            raise yaml.constructor.ConstructorError(
                None, None, f"the key {key!r} stands twice; keep one", key_node.start_mark
            )
        seen.add(key)
    return loader.construct_mapping(node, deep=True)


def _no_tag(loader: _Loader, node: yaml.Node) -> None:
    raise yaml.constructor.ConstructorError(
        None, None, f"the tag {node.tag!r} has no meaning here; remove it", node.start_mark
    )


def _text_of_characters(loader: _Loader, node: yaml.ScalarNode) -> str:
    text = loader.construct_scalar(node)
    if any(unicodedata.category(c) in ("Cc", "Cs") and c not in "\t\n" for c in text):
        raise yaml.constructor.ConstructorError(
            None, None, f"{text!r} holds what is no character", node.start_mark
        )
    return text


_Loader.add_constructor(yaml.resolver.BaseResolver.DEFAULT_MAPPING_TAG, _mapping_without_duplicates)
_Loader.add_constructor(yaml.resolver.BaseResolver.DEFAULT_SCALAR_TAG, _text_of_characters)
_Loader.add_constructor(None, _no_tag)


def load_settings(path: str | Path, changes: Mapping[str, Any] | None = None) -> Settings:
    """Read and check a settings file.

    Parameters
    ----------
    path : path
    changes : mapping, optional
        Top-level keys given on the command line, which go before the file's.

    Raises
    ------
    SettingsError
        With every mistake: file, line, key, what was found and what was expected.
    """
    path = Path(path)
    raw, lines = _read_yaml(path)
    raw = {**raw, **{key: _from_shell(value) for key, value in (changes or {}).items()}}
    problems = [*_model_problems(raw), *_reference_problems(raw)]
    if not problems:
        settings = Settings.model_validate(raw)
        problems = list(_plan_problems(settings))
        if not problems:
            return settings
    told = sorted(dict.fromkeys(problems), key=lambda problem: _line(problem[0], lines))
    listed = "\n".join(
        f"  line {_line(where, lines)}, {'.'.join(map(str, where)) or 'the file'}: {text}"
        for where, text in told
    )
    mistakes = "1 mistake" if len(told) == 1 else f"{len(told)} mistakes"
    raise SettingsError(f"{path} has {mistakes}; nothing was run.\n{listed}")


def _from_shell(value: Any) -> Any:
    """Read what was given on the command line as the settings file would: true is no text."""
    try:
        return yaml.safe_load(value) if isinstance(value, str) else value
    except Exception:  # as where the file is read; the model tells what was expected
        return value


def json_schema() -> str:
    """JSON Schema of the settings, for editors."""
    schema = {"$schema": "https://json-schema.org/draft/2020-12/schema"}
    return json.dumps(schema | Settings.model_json_schema(), indent=2, ensure_ascii=False) + "\n"


def part(settings: Settings, *names: str) -> dict[str, Any]:
    """Pick parts of the settings for a rule, as plain values.

    Parameters
    ----------
    settings : Settings
    names : str
        Such as ``filter``, ``alpha.segment_s`` or ``conditions.*.flickering``, where ``*`` stands
        for every name; ``terms`` for all that makes up the terms; ``least_rate_hz`` for the least
        working rate; ``planned`` for the list of comparisons.
    """
    whole = plain(settings)
    whole["terms"] = {
        "tags": [[name, str(frequency)] for name, frequency in settings.tag_frequencies.items()],
        "harmonics": settings.response.harmonics,
        "intermodulation_order": settings.response.intermodulation_order,
    }
    whole["least_rate_hz"] = tagging.least_rate(
        settings.intake.working_rate_hz, settings.filter.lowpass_hz, whole["terms"]
    )
    whole["planned"] = [  # in the order of the settings, which mapping keys lose
        {"name": name, **whole["comparisons"][name]} for name in settings.comparisons
    ]
    picked: dict[str, Any] = {}
    for name in names:
        _pick(whole, name.split("."), picked)
    return plain(picked)


def _pick(whole: Mapping, path: list[str], picked: dict) -> None:
    first, *rest = path
    for key in whole if first == "*" else [first]:
        if rest:
            _pick(whole[key], rest, picked.setdefault(key, {}))
        else:
            picked[key] = whole[key]


def plain(value: Any) -> Any:
    """Turn settings into plain values with sorted keys, as rules hand them to scripts.

    Snakemake notices a changed setting by the text of the value: keys in another order, or another
    type of the same number, must not look like a change.
    """
    if isinstance(value, BaseModel):
        return plain(value.model_dump())
    if isinstance(value, Mapping):
        return {key: plain(value[key]) for key in sorted(value)}
    if isinstance(value, list | tuple):
        return [plain(item) for item in value]
    return value


def _read_yaml(path: Path) -> tuple[dict, dict[tuple, int]]:
    try:
        text = path.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        raise SettingsError(f"{path}: there is no such settings file; check the path.") from None
    except IsADirectoryError:
        raise SettingsError(f"{path} is a folder; give the settings file in it.") from None
    except UnicodeDecodeError:
        raise SettingsError(f"{path} is not text in UTF-8; save it as UTF-8.") from None
    except OSError as error:
        raise SettingsError(
            f"{path} cannot be read ({error.strerror}); check its permissions and its path."
        ) from None
    if len(text) > MOST_CHARACTERS:
        raise SettingsError(
            f"{path} has more than {MOST_CHARACTERS} characters, as no settings file has; begin "
            "with a copy of config/config.yaml."
        )
    try:
        loader = _Loader(text)  # a SafeLoader: it builds plain values only
        tree = loader.get_single_node()
        # counted before values are built: aliases of aliases can stand for billions of them
        lines = list(islice(_key_lines(tree), MOST_ENTRIES + 1))
        if len(lines) > MOST_ENTRIES:
            raise SettingsError(
                f"{path} has more than {MOST_ENTRIES} entries once its aliases (*name) are "
                "written out; write out those that you need."
            )
        raw = loader.construct_document(tree) if tree else None
    except SettingsError:
        raise
    except yaml.MarkedYAMLError as error:
        mark = error.problem_mark or error.context_mark
        place = f", line {mark.line + 1}, column {mark.column + 1}" if mark else ""
        raise SettingsError(f"{path}{place}: {_yaml_problem(error)}.") from None
    except yaml.reader.ReaderError as error:
        raise SettingsError(
            f"{path} holds a character that belongs in no text (#x{error.character:04x} at "
            f"position {error.position}); remove it, and save the file as UTF-8."
        ) from None
    except RecursionError:
        raise SettingsError(
            f"{path} is nested too deeply, or an alias (*name) stands within what it stands for; "
            "write it out."
        ) from None
    except Exception as error:  # the reader raises whatever a date or a tag such as !!bool leads to
        raise SettingsError(
            f"{path} holds a value that cannot be what it looks like, such as a date or a number "
            f"({str(error).split(';')[0]}); put it between quotation marks if it is text."
        ) from None
    if not isinstance(raw, dict):
        raise SettingsError(
            f"{path} holds {_shown(raw)}, expected lines of `key: value`; begin with a copy of "
            "config/config.yaml."
        )
    return raw, dict(lines)


def _yaml_problem(error: yaml.MarkedYAMLError) -> str:
    problem = str(error.problem)
    if "'\\t'" in problem:
        return f"{problem}. Use spaces, not tabs, to indent"
    if problem == "second occurrence":  # of an anchor, which only the context tells
        problem = str(error.context).split(";")[0]
    return problem if ";" in problem else f"{problem}; correct this line or the one before"


def _shown(value: Any) -> str:
    """Value as it could stand in the file, shortened."""
    if value is None:
        return "nothing"
    if isinstance(value, bool):
        return str(value).lower()
    try:
        text = repr(value)
    except ValueError:  # of a whole number that Python will not print
        text = "a number of thousands of digits"
    return text if len(text) <= 60 else f"{text[:57]}..."


def _key_lines(node: yaml.Node | None, prefix: tuple = ()) -> Iterator[tuple[tuple, int]]:
    """Yield (key path as texts, line) of a YAML tree."""
    if isinstance(node, yaml.MappingNode):
        for key, value in node.value:
            where = (*prefix, str(key.value) if isinstance(key, yaml.ScalarNode) else "")
            yield where, key.start_mark.line + 1
            yield from _key_lines(value, where)
    elif isinstance(node, yaml.SequenceNode):
        for index, item in enumerate(node.value):
            yield (*prefix, str(index)), item.start_mark.line + 1
            yield from _key_lines(item, (*prefix, str(index)))


def _line(where: tuple, lines: Mapping[tuple, int]) -> int:
    """Line of a key, or of the nearest part that holds it."""
    where = tuple(map(str, where))
    while where and where not in lines:
        where = where[:-1]
    return lines.get(where, 1)


Problem = tuple[tuple, str]

_EXPECTED = {
    "missing": "is required; add it",
    "too_long": "has too many items",
    "too_short": "has too few items",
    "string_pattern_mismatch": "must be lower-case letters, digits and _, and begin with a letter",
    "string_type": "must be text (put it between quotation marks)",
    "bool_type": "must be true or false",
    "int_type": "must be a whole number",
    "float_type": "must be a number",
    "dict_type": "must hold `key: value` lines",
    "model_type": "must hold `key: value` lines",
    "list_type": "must be a list, such as [a, b]",
    "finite_number": "must be a finite number",
    "invalid_key": "is not a setting; names of settings are text",
}


def _model_problems(raw: dict) -> Iterator[Problem]:
    try:
        Settings.model_validate(raw)
    except ValidationError as error:
        alternatives: dict[tuple, list[str]] = {}
        found: dict[tuple, str] = {}
        for item in error.errors(include_url=False):
            where = _place(item["loc"], raw, item["type"] == "missing")
            alternatives.setdefault(where, []).append(_expectation(item, where))
            if item["type"] not in {"missing", "extra_forbidden", "value_error"}:
                found[where] = f", found {_shown(item['input'])}"
        for where, expectations in alternatives.items():
            first, *others = dict.fromkeys(expectations)
            told = [first, *(other.removeprefix("must be ") for other in others)]
            yield where, " or ".join(told) + found.get(where, "")


def _place(location: tuple, raw: Any, missing: bool) -> tuple:
    """Keys of the file that lead to a mistake, without the names pydantic gives alternatives."""
    where, value = [], raw
    for part in location:
        if (isinstance(value, dict) and part in value) or (
            isinstance(value, list) and isinstance(part, int) and part < len(value)
        ):
            where.append(part)
            value = value[part]
    return (*where, location[-1]) if missing else tuple(where)


def _expectation(item: Mapping, where: tuple) -> str:
    kind = item["type"]
    if kind == "extra_forbidden":
        return f"is not a setting; {_nearest(where[-1], _siblings(where))}"
    if kind == "value_error":
        return str(item["ctx"]["error"])
    return _EXPECTED.get(kind) or item["msg"].replace("Input should be", "must be")


def _siblings(where: tuple) -> list[str]:
    """Names of the settings that may stand at this place."""
    model: Any = Settings
    for part in where[:-1]:
        if isinstance(model, type) and issubclass(model, BaseModel):
            if part not in model.model_fields:
                return []
            model = model.model_fields[part].annotation
        model = next((m for m in _models_within(model) if m), model)
    return list(model.model_fields) if hasattr(model, "model_fields") else []


def _models_within(annotation: Any) -> Iterator[type[BaseModel]]:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        yield annotation
    for inner in getattr(annotation, "__args__", ()):
        yield from _models_within(inner)


def _nearest(name: Any, names: list[str]) -> str:
    near = difflib.get_close_matches(str(name), names, n=1, cutoff=0.5)
    if near:
        return f"did you mean {near[0]}?"
    return f"there are {', '.join(names)}" if names else "remove it"


def _reference_problems(raw: dict) -> Iterator[Problem]:
    """Names that are used but stand nowhere; checked even where other things are wrong."""

    def part(*keys: Any) -> dict:
        value: Any = raw
        for key in keys:
            value = value.get(key) if isinstance(value, dict) else None
        return value if isinstance(value, dict) else {}

    known = {kind: list(part(kind)) for kind in ("tags", "conditions", "regions")}

    def check(kind: str, name: Any, *where: Any) -> Iterator[Problem]:
        if isinstance(name, str) and name not in known[kind]:
            yield where, f"there is no {kind[:-1]} {name!r}; {_nearest(name, known[kind])}"

    for name, tag in part("tags").items():
        if isinstance(tag, dict) and "frames_per_cycle" in tag:
            refresh = part("display").get("refresh_hz")
            if refresh is None:
                yield ("tags", name), "frames_per_cycle needs display.refresh_hz; add it"
    for name in part("conditions"):
        condition = part("conditions", name)
        flickering = condition.get("flickering")
        for index, tag in enumerate(flickering if isinstance(flickering, list) else []):
            yield from check("tags", tag, "conditions", name, "flickering", index)
        attended = condition.get("attended")
        yield from check("tags", attended, "conditions", name, "attended")
        if (
            isinstance(flickering, list)
            and attended in known["tags"]
            and attended not in flickering
        ):
            where = ("conditions", name, "attended")
            yield where, f"{attended!r} does not flicker in this condition"
    adopted = part("flicker").get("adopt")
    for index, adoption in enumerate(adopted if isinstance(adopted, list) else []):
        if isinstance(adoption, dict):
            yield from check("tags", adoption.get("tag"), "flicker", "adopt", index, "tag")
    for key in ("region", "right_region", "left_region"):
        yield from check("regions", part("alpha").get(key), "alpha", key)
    yield from check(
        "regions", part("relation").get("response_region"), "relation", "response_region"
    )
    frequency_from = part("alpha").get("frequency_from")
    for index, name in enumerate(frequency_from if isinstance(frequency_from, list) else []):
        yield from check("conditions", name, "alpha", "frequency_from", index)
    for name in part("comparisons"):
        comparison = part("comparisons", name)
        yield from check("regions", comparison.get("region"), "comparisons", name, "region")
        for side in ("plus", "minus"):
            cells = comparison.get(side)
            for index, cell in enumerate(cells if isinstance(cells, list) else []):
                if isinstance(cell, dict):
                    where = ("comparisons", name, side, index)
                    yield from check("conditions", cell.get("condition"), *where, "condition")
                    yield from check("tags", cell.get("tag"), *where, "tag")


def _plan_problems(settings: Settings) -> Iterator[Problem]:
    """What cannot be measured as the settings stand."""
    for finding in plan.blocking(part(settings, *plan.SETTINGS)):
        yield finding.where, f"{finding.found}; {finding.advice}"
    for name, comparison in settings.comparisons.items():
        if not comparison.measure.startswith("alpha"):
            for side in ("plus", "minus"):
                for index, cell in enumerate(getattr(comparison, side)):
                    where = ("comparisons", name, side, index)
                    if cell.tag is None:
                        yield where, f"{comparison.measure} is measured at a tag; add tag:"
