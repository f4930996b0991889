"""The study file as typed, validated settings: what is asked, with nothing computed.

Every section of the study file is one frozen model; the documentation of a key stands beside it.
All problems of a file are collected and raised together.
"""

from __future__ import annotations

import json
import os
import tomllib
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Annotated, Any, Literal, Self

from pydantic import (
    BaseModel,
    ConfigDict,
    Field,
    PrivateAttr,
    ValidationError,
    field_validator,
    model_validator,
)

from seedaudit.errors import Problem, StudyError
from seedaudit.study_problems import problems_of

PUBLISHED_REGIONS = ("dosenbach2010",)
SAMPLE_NAME = r"^[A-Za-z0-9][A-Za-z0-9_-]*$"

Rule = Literal["p", "fdr", "bonferroni", "fwe", "t", "effect", "density"]
Share = Field(gt=0, lt=1)


class Section(BaseModel):
    """A section of the study file: frozen, unknown keys refused, no silent conversions."""

    model_config = ConfigDict(
        extra="forbid", frozen=True, allow_inf_nan=False, str_strip_whitespace=True
    )


class Data(Section):
    """Where the images are."""

    runs: str | Annotated[tuple[str, ...], Field(min_length=1)] | None = None
    """Table of runs (.tsv: participant_id, bold; maybe run, confounds, mask), glob, or files."""
    bids: str | None = None
    """Or: a BIDS derivative data set."""
    select: dict[str, str] = Field(default_factory=dict)
    """BIDS entities that a run of `bids` must have."""
    grid: str | None = None
    """Image that runs are declared to be on the grid of, where their headers code no space."""
    mask: str | None = None
    """Analysis mask on the grid of the runs; without one: voxels present in every run."""
    regions: str | None = None
    """Label image with its look-up table beside it, or the name of a published coordinate set."""
    on_bad_run: Literal["stop", "set-aside"] = "stop"
    """What to do with a participant one of whose runs cannot be used."""
    repetition_time: float | None = Field(default=None, gt=0)
    """Seconds; only where the header is wrong."""

    @model_validator(mode="after")
    def _one_source(self) -> Self:
        if (self.runs is None) == (self.bids is None):
            raise ValueError("give either `runs` or `bids`")
        if self.select and self.bids is None:
            raise ValueError("`select` goes with `bids`")
        return self


class Censor(Section):
    """Volumes to censor, each by a nuisance column of its own."""

    column: str
    above: float
    before: int = Field(default=0, ge=0)
    after: int = Field(default=0, ge=0)


class Cleaning(Section):
    """The one nuisance projection; without the section the data are taken as clean."""

    confounds: tuple[str, ...] = ()
    """Names or globs of columns of the confounds table."""
    drift: int = Field(default=1, ge=0, le=10)
    """Order of the polynomial drift."""
    band: tuple[float, float] | None = None
    """Pass band in Hz."""
    censor: Censor | None = None
    smooth: float = Field(default=0.0, ge=0, le=50)
    """FWHM of a Gaussian in mm."""

    @field_validator("band")
    @classmethod
    def _rising(cls, band: tuple[float, float] | None) -> tuple[float, float] | None:
        if band is not None and not 0 <= band[0] < band[1]:
            raise ValueError("two rising frequencies in Hz, 0 <= low < high")
        return band


class Seed(Section):
    """One reported seed."""

    name: str = Field(default="seed", pattern=SAMPLE_NAME)
    at: tuple[float, float, float]
    """Centre, mm."""
    space: Literal["mni", "talairach", "native"] = "mni"
    """Space of `at`: `native` is the world space of the images themselves."""
    radius: float = Field(default=6.0, gt=0, le=50)
    """mm"""


class Placements(Section):
    """How shifted seeds are drawn around each reported seed."""

    within: float | None = Field(default=None, gt=0, le=100)
    """Radius of the cloud, mm (default 6; with `uncertainty`, three standard deviations)."""
    draw: Literal["ball", "normal", "shell", "lattice"] = "ball"
    count: int = Field(default=100, ge=2, le=100_000)
    random_state: int = Field(default=0, ge=0)
    sd: float | None = Field(default=None, gt=0)
    """`normal`: standard deviation along each axis, mm (default: half of `within`)."""
    distances: tuple[float, ...] | None = None
    """`shell`: distances of the shells, mm (default: `within` alone)."""
    step: float | None = Field(default=None, gt=0)
    """`lattice`: spacing, mm (default 2)."""
    radii: tuple[float, ...] | None = None
    """Sphere radii to cross the shifts with, mm (default: the radius of the seed)."""
    snap: bool = False
    """Round shifts to whole voxels, so that every placement has the same shape."""
    weighting: Literal["hard", "soft"] = "hard"
    """`soft` weights a voxel by the share of its volume inside the sphere."""
    inside: str | None = None
    """Mask that the centres must stay in."""
    min_coverage: float = Field(default=0.5, gt=0, le=1)
    """Smallest share of a sphere inside the mask."""
    uncertainty: dict[str, float] | None = None
    """Standard deviations in mm that make up the placement error, in place of `within`."""
    controls: int = Field(default=20, ge=0, le=1000)
    """Unrelated seeds at least 30 mm away (in `inside`, if given), for the floor."""

    @field_validator("distances", "radii")
    @classmethod
    def _positive(cls, values: tuple[float, ...] | None) -> tuple[float, ...] | None:
        if values is not None and (not values or min(values) <= 0):
            raise ValueError("one or more lengths above 0 mm")
        return values

    @field_validator("uncertainty")
    @classmethod
    def _budget(cls, budget: dict[str, float] | None) -> dict[str, float] | None:
        if budget is not None and (
            not budget or min(budget.values()) < 0 or max(budget.values()) <= 0
        ):
            raise ValueError("standard deviations in mm, none negative, not all 0")
        return budget

    @model_validator(mode="after")
    def _keys_fit_the_draw(self) -> Self:
        if self.uncertainty is not None and "draw" not in self.model_fields_set:
            # a budget of standard deviations describes a normal cloud
            object.__setattr__(self, "draw", "normal")
        fits = {"sd": "normal", "distances": "shell", "step": "lattice", "uncertainty": "normal"}
        for key, draw in fits.items():
            if getattr(self, key) is not None and self.draw != draw:
                raise ValueError(f'`{key}` goes with draw = "{draw}"')
        if self.sd is not None and self.uncertainty is not None:
            raise ValueError("give either `sd` or `uncertainty`")
        return self


class Group(Section):
    """The group model."""

    table: str | None = None
    """Participants table (.tsv), needed when the model names columns."""
    model: str = "~ 1"
    """Wilkinson notation."""
    effect: str | None = None
    """The tested linear combination; may be left out for `~ 1`."""
    folds: int = Field(default=8, ge=2, le=64)
    missing: Literal["intersection", "counts"] = "intersection"
    """Voxels that some participants lack: left out, or analysed in those who have them."""


class Threshold(Section):
    """The rule that turns a map into classes, the same for every placement."""

    rule: Rule = "fdr"
    level: float | None = Field(default=None, gt=0)
    """Defaults: p 0.001; fdr, bonferroni and fwe 0.05; t 3; effect 0.2; density 0.1 (a share)."""
    rearrangements: int = Field(default=5000, ge=100, le=1_000_000)
    """`fwe`, and the paired test of claims: sign flips or permutations of the participants."""
    scale: Literal["z", "r"] = "z"
    """`effect`: on Fisher z or on the correlation."""
    per_tail: bool = False
    """`density`: the share is taken from each tail by signed t."""
    min_extent: float = Field(default=0.0, ge=0)
    """Smallest cluster, mm3."""
    neighbours: Literal[6, 18, 26] = 26

    @model_validator(mode="after")
    def _level_fits_the_rule(self) -> Self:
        usual = {"p": 0.001, "fdr": 0.05, "bonferroni": 0.05, "fwe": 0.05, "t": 3.0, "effect": 0.2}
        if self.level is None:
            object.__setattr__(self, "level", usual.get(self.rule, 0.1))
        elif self.rule in ("p", "fdr", "bonferroni", "fwe", "density") and self.level >= 1:
            raise ValueError(
                f"`level` = {self.level:g} of rule {self.rule} must be a share: above 0, below 1"
            )
        return self


class Consensus(Section):
    """What counts as agreement, and where it is looked at."""

    exclude_margin: float | None = Field(default=None, ge=0)
    """mm around the spheres of the cloud that no analysis uses; default: the largest voxel edge."""
    safe: float = Field(default=0.95, gt=0.5, le=1)
    """Share of placements from which a voxel is safe."""


class Claims(Section):
    """The sentences a paper wants to make."""

    table: str
    smallest_effect: float = Field(default=0.05, gt=0)
    """Fisher z"""


class Steadier(Section):
    """The search for a steadier seed nearby."""

    search: float = Field(default=8.0, gt=0, le=50)
    """Largest distance of a candidate from the reported seed, mm."""
    step: float = Field(default=2.0, gt=0)
    """Spacing of the candidates and of their neighbours, mm."""
    keep_similarity: float = Field(default=0.8, gt=0, le=1)
    """Spatial correlation with the reported map that a candidate must keep."""
    targets: int = Field(default=4000, ge=100, le=1_000_000)
    """Voxels, evenly spread over the mask, that maps are compared on."""

    @model_validator(mode="after")
    def _step_fits(self) -> Self:
        if self.step > self.search:
            raise ValueError(f"`step` = {self.step:g} must not be above `search` = {self.search:g}")
        return self


class Study(Section):
    """Everything that is asked, from a study file, a mapping or keyword arguments.

    Relative paths are resolved against `base`, the folder of the study file.
    """

    title: str = "Seed placement audit"
    output: str = "audit"
    data: Data
    cleaning: Cleaning | None = None
    seed: tuple[Seed, ...] = Field(min_length=1)
    placements: Placements = Placements()
    group: Group = Group()
    threshold: Threshold = Threshold()
    consensus: Consensus = Consensus()
    claims: Claims | None = None
    steadier: Steadier | None = None
    _base: Path = PrivateAttr(default_factory=Path.cwd)

    @field_validator("seed")
    @classmethod
    def _names_differ(cls, seeds: tuple[Seed, ...]) -> tuple[Seed, ...]:
        # compared without case: each name becomes a folder
        if len({seed.name.casefold() for seed in seeds}) < len(seeds):
            raise ValueError("each seed needs a `name` of its own")
        return seeds

    @property
    def base(self) -> Path:
        """Folder that relative paths start from."""
        return self._base

    def path(self, text: str) -> Path:
        """The file that a path of the study file means."""
        return self._base / os.path.expanduser(text)

    @classmethod
    def load(cls, path: str | Path) -> Study:
        """Read and check a study file.

        Raises
        ------
        StudyError
            With every problem of the file: syntax, keys, types, ranges, missing files.
        """
        path = Path(path)
        try:
            content = tomllib.loads(path.read_text(encoding="utf-8"))
        except OSError as error:
            found = f"cannot be read ({error.strerror or error})"
            raise StudyError(
                Problem(str(path), found, "a study file (TOML)", "check the path")
            ) from error
        except UnicodeDecodeError as error:
            raise StudyError(
                Problem(
                    path.name, "is not text in UTF-8", "a study file (TOML)", "save it as UTF-8"
                )
            ) from error
        except tomllib.TOMLDecodeError as error:
            raise StudyError(
                Problem(path.name, f"is not valid TOML: {error}", "TOML 1.0", "mend that line")
            ) from error
        except RecursionError as error:
            found = "brackets are nested too deeply"
            raise StudyError(Problem(path.name, found, "a study file (TOML)")) from error
        return cls.from_mapping(content, path.parent)

    @classmethod
    def from_mapping(cls, content: Mapping[str, Any], base: str | Path = ".") -> Study:
        """Check a mapping with the content of a study file; see `load`."""
        base = Path(base)
        problems: list[Problem] = []
        study = None
        try:
            # JSON is the strict mode in which a list may stand for a tuple but "6" not for 6
            study = cls.model_validate_json(json.dumps(content, default=str), strict=True)
        except ValidationError as error:
            problems += problems_of(error, cls)
        problems += list(_missing_files(content, base))
        if problems or study is None:
            raise StudyError(*problems)
        study._base = base
        return study


def _missing_files(content: Mapping[str, Any], base: Path) -> Iterator[Problem]:
    """Look for the named files even when other keys are wrong, so that all is said at once."""
    named = [
        ("data", "grid"),
        ("data", "mask"),
        ("data", "regions"),
        ("data", "bids"),
        ("data", "runs"),
        ("placements", "inside"),
        ("group", "table"),
        ("claims", "table"),
    ]
    for section, key in named:
        values = content.get(section)
        text = values.get(key) if isinstance(values, Mapping) else None
        if not isinstance(text, str) or text in PUBLISHED_REGIONS:
            continue
        if key == "runs" and any(mark in text for mark in "*?["):
            continue
        try:
            present = (base / os.path.expanduser(text)).exists()
        except (OSError, ValueError):  # a name that is too long, or holds a zero byte
            present = False
        if not present:
            also = f", or one of {', '.join(PUBLISHED_REGIONS)}" if key == "regions" else ""
            yield Problem(
                f"{section}.{key}",
                f"{text!r} does not exist",
                f"a path relative to the study file{also}",
                "correct the path",
            )
