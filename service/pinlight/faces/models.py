"""The HTTP interface's questions and answers, as models that also make its OpenAPI description."""

from typing import Annotated, Any, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, Discriminator, Field, Tag

__all__ = [
    "AliveAnswer",
    "ArraysAnswer",
    "ChangesAnswer",
    "ChangesQuestion",
    "ComparisonAnswer",
    "ComparisonQuestion",
    "CorrectionAnswer",
    "EditionAnswer",
    "EditionCheck",
    "EditionsAnswer",
    "HealthAnswer",
    "IntakeAnswer",
    "IntakeQuestion",
    "MergerQuestion",
    "PlanAnswer",
    "PlanQuestion",
    "PreferenceQuestion",
    "Problem",
    "RankingAnswer",
    "RankingQuestion",
    "SplitQuestion",
    "StandingQuestion",
    "StandingRecord",
    "StandingsAnswer",
    "StarAnswer",
    "StarChangesAnswer",
    "StarsAnswer",
    "StarsQuestion",
    "TargetQuestion",
]


class _Question(BaseModel):
    model_config = ConfigDict(extra="forbid", allow_inf_nan=False)


class _Answer(BaseModel):
    model_config = ConfigDict(extra="forbid")


def _split(value: Any) -> Any:
    return [name.strip() for name in value.split(",") if name.strip()] if isinstance(value, str) else value


NameOrPlace = Annotated[str, Field(max_length=200, description="A star's name, or coordinates.")]


class _KnownOfTarget(_Question):
    name: Annotated[str, Field(max_length=200)] = ""
    magnitudes: dict[str, float] = Field(default_factory=dict)
    diameter_mas: float | None = None
    diameter_error_mas: float | None = None


class TargetQuestion(_KnownOfTarget):
    """A target of the caller's own; ICRS, epoch 2000."""

    ra_deg: float
    dec_deg: float


class RankingQuestion(_Question):
    """Parameters of a ranking; an array, or a baseline and a wavelength."""

    target: Annotated[
        Annotated[NameOrPlace, Tag("named-target")] | Annotated[TargetQuestion, Tag("own-target")],
        Discriminator(
            lambda value: "own-target" if isinstance(value, dict | TargetQuestion) else "named-target"
        ),
    ]
    array: str | None = None
    stations: Annotated[list[str] | None, BeforeValidator(_split)] = None
    mode: str | None = None
    baseline_m: float | None = None
    wavelength_um: float | None = None
    separation_max_deg: float | None = None
    magnitude_max: float | None = None
    v2_min: float | None = None
    judge: str = "rms"
    best: int = 20
    edition: str | None = None
    night: Annotated[str | None, Field(description="Date of an evening at the array.")] = None
    at: Annotated[str | None, Field(description="One time, UTC.")] = None
    from_: Annotated[str | None, Field(alias="from", description="Begin of a span, UTC.")] = None
    to: Annotated[str | None, Field(description="End of the span, UTC.")] = None
    with_: Annotated[list[str] | None, BeforeValidator(_split), Field(alias="with")] = None


class PlanTarget(_KnownOfTarget):
    """A target that a night is wanted for; priority 1 counts most. Without a place its name tells it."""

    ra_deg: float | None = None
    dec_deg: float | None = None
    priority: float = 1.0
    repeats: int = 1
    required_error_percent: float | None = None
    from_: Annotated[str | None, Field(alias="from")] = None
    to: str | None = None


class PlanQuestion(_Question):
    """Targets, an array and a night, or a span of UTC."""

    targets: Annotated[list[PlanTarget], Field(min_length=1, max_length=200)]
    array: str
    stations: Annotated[list[str] | None, BeforeValidator(_split)] = None
    mode: str | None = None
    night: str | None = None
    from_: Annotated[str | None, Field(alias="from")] = None
    to: str | None = None
    edition: str | None = None
    time_limit_s: Annotated[float, Field(gt=0, le=60)] = 5.0


class StarsQuestion(_Question):
    """By name, or around a place."""

    name: Annotated[str | None, Field(max_length=200)] = None
    ra_deg: float | None = None
    dec_deg: float | None = None
    radius_deg: Annotated[float, Field(gt=0, le=180)] = 1.0
    limit: Annotated[int, Field(ge=1, le=10_000)] = 100


class StandingQuestion(_Question):
    """A judgement of a star, of one band or mode where these are given."""

    standing: str
    reason: str
    band: str | None = None
    mode: Annotated[str | None, Field(description="MODE or ARRAY/MODE.")] = None
    evidence: Annotated[list[str | dict[str, Any]], Field(max_length=100)] = Field(default_factory=list)


class PreferenceQuestion(_Question):
    """Whose magnitude is to count in a band; null for what the rules say."""

    band: str
    source: str | None


class MergerQuestion(_Question):
    """The entry that is to stand for both."""

    into_id: int


class SplitQuestion(_Question):
    """Whose contributions are of another star, and what that is called."""

    source: str
    name: str
    ra_deg: float | None = None
    dec_deg: float | None = None


class IntakeQuestion(_Question):
    """A small table of stars, as text; columns are found as `pinlight add` finds them."""

    table: Annotated[str, Field(min_length=1)]
    format: Literal["csv", "ecsv", "votable"] = "csv"
    source: str
    reference: str
    licence: str = ""
    map: dict[str, str] = Field(default_factory=dict)
    epoch: float = 2000.0
    zero_points_jy: dict[str, float] = Field(default_factory=dict)
    match_arcsec: float = 1.5
    dry_run: bool = False


class ChangesQuestion(_Question):
    """How many changes, or at what time a star is wanted."""

    most: Annotated[int, Field(ge=1, le=1000)] = 50
    at: Annotated[str | None, Field(description="A past time, UTC.")] = None


class ComparisonQuestion(_Question):
    """The other edition, by default the newest, and how many stars to name."""

    other: str | None = None
    most: Annotated[int, Field(ge=0, le=1000)] = 20


class Measured(_Answer):
    value: float
    error: float


class SourcedMagnitude(Measured):
    """A magnitude of one source; `quality` is the source's letter, `chosen` a keeper's choice."""

    error_assumed: bool
    quality: str
    chosen: bool
    source: str


class StarMagnitude(SourcedMagnitude):
    """The magnitude that counts in a band, and those of other sources."""

    others: list[SourcedMagnitude]


class DiameterAnswer(_Answer):
    limb_darkened_mas: float
    uniform_disk_mas: float
    band: str
    own_error_mas: float
    shared_error_mas: float
    error_mas: float
    relations: list[str]
    discordant: bool


class VisibilityAnswer(_Answer):
    v2_min: float
    v2_max: float
    longest_baseline_m: float


class BudgetAnswer(_Answer):
    """Per cent of the target's V^2; null where a term cannot be computed."""

    diameter: float | None
    photon: float | None
    drift: float | None
    brightness: float | None
    companion: float | None
    shape: float | None


class Window(_Answer):
    start_utc: str
    end_utc: str


class CalibratorAnswer(_Answer):
    rank: int
    star_id: int
    name: str
    ra_deg: float
    dec_deg: float
    separation_deg: float
    spectral_type: str
    flags: list[str]
    magnitudes: dict[str, Measured]
    diameter: DiameterAnswer
    visibility: VisibilityAnswer
    budget_percent: BudgetAnswer
    calibration_error_percent: float | None
    standing: Literal["vouched", "unproven", "doubted", "barred"] | None
    window_utc: list[Window] | None
    coarse_paths_m: dict[str, float] | None


class TargetAnswer(_Answer):
    name: str
    ra_deg: float
    dec_deg: float
    magnitude: float | None
    magnitudes: dict[str, float]
    diameter_mas: float | None
    diameter_error_mas: float | None
    star_id: int | None


class BaselineAnswer(_Answer):
    stations: list[str]
    length_m: float


class SetupAnswer(_Answer):
    array: str | None
    stations: list[str]
    baselines: list[BaselineAnswer]
    mode: str | None
    band: str
    wavelength_um: float
    bandwidth_um: float | None
    channels: int
    field_arcsec: float
    look_interval_min: float | None


class ParametersAnswer(_Answer):
    separation_max_deg: float
    magnitude_max: float | None
    v2_min: float
    judge: str
    best: int


class CountsAnswer(_Answer):
    """ranked plus all of excluded is stars."""

    stars: int
    ranked: int
    listed: int


class SetAnswer(_Answer):
    size: int
    star_ids: list[int]
    names: list[str]
    calibration_error_percent: float | None
    window_utc: list[Window] | None
    coarse_paths_m: dict[str, float] | None


class LookAnswer(Window):
    role: Literal["calibrator", "target"]
    name: str
    star_id: int | None


class BlockAnswer(Window):
    target: str
    coarse_paths_m: dict[str, float]
    calibration_error_percent: float
    looks: list[LookAnswer]


class Unscheduled(_Answer):
    target: str
    reason: str


class PlanAnswer(_Answer):
    """Blocks in order of time, and what could not be placed and why."""

    edition: str
    pinlight: str
    setup: SetupAnswer
    span_utc: Window
    blocks: list[BlockAnswer]
    unscheduled: list[Unscheduled]
    objective: float
    bound: float
    notes: list[str]


class RankingAnswer(_Answer):
    """Calibrators of one target, best first."""

    edition: str
    pinlight: str
    target: TargetAnswer
    setup: SetupAnswer
    parameters: ParametersAnswer
    calibrators: list[CalibratorAnswer]
    counts: CountsAnswer
    excluded: dict[str, int]
    best_sets: list[SetAnswer]
    named_set: SetAnswer | None
    span_utc: Window | None
    target_window_utc: list[Window] | None
    coarse_paths_m: dict[str, float] | None
    notes: list[str]


class StarBrief(_Answer):
    star_id: int
    name: str
    ra_deg: float
    dec_deg: float
    separation_deg: float | None
    spectral_type: str
    flags: list[str]
    magnitudes: dict[str, Measured]
    limb_darkened_mas: float | None
    error_mas: float | None


class StarsAnswer(_Answer):
    """Stars of a name or place, nearest first; `count` is how many there are, listed or not."""

    edition: str
    count: int
    stars: list[StarBrief]


class RelationPart(_Answer):
    relation: str
    diameter_mas: float
    weight: float
    residual_percent: float
    pull: float | None


class StarDiameter(_Answer):
    limb_darkened_mas: float
    uniform_disk_mas_by_band: dict[str, float] | None
    own_error_mas: float
    shared_error_mas: float
    error_mas: float
    chi_squared: float
    degrees_of_freedom: int
    probability: float
    discordant: bool
    culprit: str | None
    av_mag: float
    av_error_mag: float
    luminosity_group: str
    luminosity_probabilities: dict[str, float]
    teff_k: float | None
    logg: float | None
    relation_set: str
    relations: list[RelationPart]


class Neighbour(_Answer):
    neighbour_id: int | None
    name: str | None
    separation_arcsec: float
    delta_v_mag: float | None
    delta_ks_mag: float | None


class StandingRecord(_Answer):
    """One judgement; `uid` is the same wherever it is carried."""

    standing: str
    band: str | None
    mode: str | None
    reason: str
    evidence: list[str | dict[str, Any]]
    made_by: str
    made_utc: str
    uid: str


class StandingsAnswer(_Answer):
    """All judgements of a star, oldest first, and the general one that counts."""

    star_id: int
    standing: str | None
    standings: list[StandingRecord]


class ChangeRecord(_Answer):
    """Who changed something, when and what; of a star also which rows were added and overwritten."""

    change_id: int
    made_utc: str
    made_by: str
    action: str
    detail: dict[str, Any]
    added: dict[str, int] | None = None
    overwritten: list[dict[str, Any]] | None = None


class ChangesAnswer(_Answer):
    """The newest changes of the catalogue, newest first."""

    changes: list[ChangeRecord]


class CellThen(_Answer):
    value: str | float | int | bool | list[Any] | None
    made_by: str
    made_utc: str
    action: str


class StarThen(_Answer):
    star_id: int
    at_utc: str
    rows: dict[str, list[dict[str, CellThen]]]


class StarChangesAnswer(_Answer):
    """All changes of a star, oldest first; or with `at` how it stood then."""

    star_id: int
    changes: list[ChangeRecord] | None = None
    then: StarThen | None = None


class CorrectionAnswer(_Answer):
    """The change in the log, 0 where nothing changed; of a split also the new star."""

    change_id: int
    star_id: int | None = None


class RejectedRow(_Answer):
    line: int
    reason: str
    names: str


class IntakeAnswer(_Answer):
    """What came of an intake; with `dry_run` what would be read, in `preview`."""

    intake_id: int | None = None
    rows: int
    added: int = 0
    matched: int = 0
    rejected: int = 0
    already: bool = False
    rejects: list[RejectedRow] = Field(default_factory=list)
    preview: dict[str, Any] | None = None


class EditionAnswer(_Answer):
    """A frozen state of the catalogue, made after the change `change_id`."""

    name: str
    made_utc: str
    star_count: int
    relation_set: str
    change_id: int


class EditionsAnswer(_Answer):
    """All editions, newest first."""

    editions: list[EditionAnswer]


class EditionCheck(_Answer):
    """Whether an edition's files are what its hash says."""

    name: str
    sound: bool
    hash: str | None
    problem: str | None


class DifferingStar(_Answer):
    star_id: int
    name: str
    values: dict[str, list[Any]] = Field(default_factory=dict)


class Differences(_Answer):
    count: int
    stars: list[DifferingStar]


class ComparisonAnswer(_Answer):
    """What differs between two editions; of each kind how many stars, and the first of them."""

    one: str
    other: str
    added: Differences
    removed: Differences
    changed: Differences
    diameters: Differences
    standings: Differences


class StarAnswer(_Answer):
    """Everything known of one star."""

    star_id: int
    name: str
    identifiers: list[str]
    ra_deg: float
    dec_deg: float
    pm_ra_mas_yr: float | None
    pm_dec_mas_yr: float | None
    parallax_mas: float | None
    radial_velocity_km_s: float | None
    spectral_type: str
    flags: list[str]
    magnitudes: dict[str, StarMagnitude]
    companions: list[Neighbour]
    diameter: StarDiameter | None
    standing: str | None
    standings: list[StandingRecord]
    merged: list[dict[str, Any]]
    source: str


class ArrayAnswer(_Answer):
    key: str
    name: str
    latitude_deg: float
    longitude_deg: float
    height_m: float
    stations: list[str]
    longest_baseline_m: float
    modes: list[dict[str, Any]]
    limits: dict[str, float]
    drift: dict[str, float]


class ArraysAnswer(_Answer):
    arrays: list[ArrayAnswer]


class HealthAnswer(_Answer):
    status: Literal["ok"]
    pinlight: str
    edition: str
    stars: int


class AliveAnswer(_Answer):
    """The process answers."""

    status: Literal["alive"]
    pinlight: str


class Problem(_Answer):
    """Problem details, RFC 9457."""

    type: str
    title: str
    status: int
    detail: str
