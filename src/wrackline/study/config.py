"""The configuration of a study: one typed model, from which schema, defaults and documentation are made."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field, field_validator, model_validator

Fraction = Annotated[float, Field(gt=0, lt=1)]
FlagUse = Literal["keep", "exclude", "below", "above"]
Distribution = Literal["GLO", "GEV", "GNO", "PE3", "GPA", "KAP", "WAK"]
FLAG_NAMES = (
    "estimated",
    "regulated",
    "diverted",
    "regulated_or_diverted",
    "regulation_unknown",
    "basin_changed",
    "dam_break",
    "daily_mean",
    "date_uncertain",
    "unsystematic",
    "revised",
    "cause_unspecified",
)
SCREENING_FLAGS = (
    "short_record",
    "regulated",
    "trend",
    "change_point",
    "serial_correlation",
    "extreme_flood",
    "long_gaps",
    "redundant",
)
RESERVED_COLUMNS = frozenset(
    [
        "gauge_id",
        "target_id",
        "site_id",
        "name",
        "latitude",
        "longitude",
        "area",
        "area_km2",
        "contributing_area",
        "contributing_area_km2",
        "centroid_latitude",
        "centroid_longitude",
        "centroid_source",
        "region",
        "regulated",
        "upstream_gauge",
        "downstream_gauge",
        "remark",
        "row",
        "used",
        "reasons",
    ]
)
"""Columns of the tables of sites, which no catchment attribute can be named after."""


class _Part(BaseModel):
    """A part of the configuration: unknown keys are refused, values are checked, nothing changes later."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class About(_Part):
    """What the study is and who made it; printed on the page and in the manifest."""

    title: str = Field("Regional flood-frequency study", description="Title of the page.")
    region: str = Field("", description="The region in words.")
    agency: str = Field("", description="Who is responsible for the study.")
    purpose: str = Field("", description="What was asked of the study.")
    edition: str = Field(
        "working", description="Name of this edition; printed with every citation of the run."
    )


class Inputs(_Part):
    """The study's files, relative to the study file. Blank: the study has none."""

    gauges: str = Field("gauges.csv", description="One row per gauge.")
    peaks: str = Field("peaks.csv", description="One row per gauge and water year.")
    thresholds: str = Field("", description="Perception thresholds per gauge and span of years.")
    periods: str = Field(
        "", description="States of a gauge's basin (natural, regulated, moved ...) per span of years."
    )
    targets: str = Field("", description="Ungauged sites for which floods are wanted.")
    basins: str = Field("", description="GeoPackage with layer `basins` (site_id, polygon).")
    regions: str = Field("", description="GeoPackage with layer `regions` (region, polygon).")
    redundancy: str = Field("", description="The analyst's decisions on nested pairs of gauges.")
    ledger: str = Field("", description="The analyst's decisions, applied by the run and printed.")


class Units(_Part):
    """Units of the study's files and of its published tables; internal work is in m3/s and km2."""

    flow: Literal["m3/s", "ft3/s"] = Field("m3/s", description="Unit of every flow.")
    area: Literal["km2", "mi2"] = Field("km2", description="Unit of every area.")


class Attribute(_Part):
    """A numeric catchment attribute: a column of gauges.csv and targets.csv."""

    unit: str = Field("", description="Unit as printed.")
    meaning: str = Field("", description="What it measures.")
    transform: Literal["none", "log10", "sqrt", "log10_plus_1"] = Field(
        "none", description="Transformation before it enters a regression."
    )
    lower: float | None = Field(None, description="Smallest physically possible value.")
    upper: float | None = Field(None, description="Largest physically possible value.")
    sign: Literal["any", "positive", "negative"] = Field(
        "any",
        description="Which way floods go with it for physical reasons; a regression of the other sign is not chosen.",
    )
    source: str = Field("", description="Where the values come from.")
    date: str = Field("", description="When they were made.")


class Aeps(_Part):
    """Annual exceedance probabilities, as fractions."""

    gauges: tuple[Fraction, ...] = Field(
        (0.9, 0.8, 0.5, 0.2, 0.1, 0.04, 0.02, 0.01, 0.005, 0.002), description="For gauges and growth curves."
    )
    targets: tuple[Fraction, ...] = Field(
        (0.5, 0.2, 0.1, 0.04, 0.02, 0.01, 0.005, 0.002), description="For ungauged sites."
    )

    @field_validator("gauges", "targets")
    @classmethod
    def _from_often_to_rare(cls, value: tuple[float, ...]) -> tuple[float, ...]:
        if len(value) == 0 or len(set(value)) != len(value):
            raise ValueError("give at least one probability, each once")
        return tuple(sorted(value, reverse=True))


class Flags(_Part):
    """What a peak's flag does to its use: `keep`; `exclude`; `below`: the flood lay between zero and the flow; `above`: at or above it."""

    estimated: FlagUse = Field("keep", description="An estimate is still the best knowledge of that year.")
    regulated: FlagUse = Field("exclude", description="The study is of natural floods.")
    diverted: FlagUse = Field("exclude", description="As regulated.")
    regulated_or_diverted: FlagUse = Field("exclude", description="As regulated.")
    regulation_unknown: FlagUse = Field(
        "keep", description="Excluding it discards much good record; its share is reported."
    )
    basin_changed: FlagUse = Field(
        "exclude", description="Urbanisation, mining, channel works: another population."
    )
    dam_break: FlagUse = Field("exclude", description="Not a flood of the basin.")
    daily_mean: FlagUse = Field("above", description="The instantaneous peak was at least the daily mean.")
    date_uncertain: FlagUse = Field("keep", description="The flow is not in doubt.")
    unsystematic: FlagUse = Field(
        "exclude",
        description="Recorded because it was large; needs a threshold and a historic span to be used.",
    )
    revised: FlagUse = Field("keep", description="A revision is an improvement.")
    cause_unspecified: FlagUse = Field("keep", description="Shown in the table of floods by cause.")


class Screening(_Part):
    """Tests on every record. A test flags; only the flags listed in `exclude` take a gauge out."""

    minimum_peaks: int = Field(
        10, ge=5, description="Exact systematic peaks that a record needs (common practice: 10)."
    )
    significance: Fraction = Field(
        0.05, description="Level of the trend, change-point and serial-correlation tests."
    )
    false_discovery_control: bool = Field(
        True,
        description="Judge the tests over all gauges together (Benjamini and Hochberg, 1995), not one by one.",
    )
    extreme_ratio: float = Field(
        1.5,
        gt=0,
        description="Flag a record whose largest peak exceeds its median by this many log10 cycles.",
    )
    gap_share: Fraction = Field(
        0.5, description="Flag a record that misses more than this share of the years it spans."
    )
    redundancy_distance: float = Field(
        0.5,
        gt=0,
        description="Nested pairs: largest distance between basin centroids over the root of the mean area.",
    )
    redundancy_area_ratio: float = Field(
        5.0, gt=1, description="Nested pairs: largest ratio of the two areas."
    )
    redundancy_overlap: Fraction = Field(
        0.5, description="Nested pairs with polygons: shared area over the smaller basin, at least."
    )
    exclude: tuple[Literal[SCREENING_FLAGS], ...] = Field(  # type: ignore[valid-type]
        ("short_record", "regulated", "redundant"),
        description="Flags that take a gauge out of the regional analysis.",
    )


class Dependence(_Part):
    """Correlation of concurrent annual peaks between gauges, as a function of distance."""

    minimum_common_years: int = Field(
        25, ge=5, description="Years two gauges must share to inform the distance model."
    )
    fallback_common_years: int = Field(
        15, ge=5, description="Used with a warning when fewer than 30 pairs share `minimum_common_years`."
    )


class AtSite(_Part):
    """Fits of log-Pearson III to every gauge's own record."""

    plotting_position: Literal["weibull", "cunnane", "gringorten", "hazen"] = Field(
        "weibull",
        description="Constant of the plotting positions; they are shown, nothing is fitted to them.",
    )
    skew_bound: float | None = Field(
        None,
        gt=0,
        le=3,
        description="Hold station skews within plus and minus this; blank: no bound (1.41 is in use elsewhere).",
    )
    alternatives: bool = Field(
        True,
        description="Fit and judge other distributions beside log-Pearson III; they inform, nothing depends on them.",
    )
    page_figures: tuple[str, ...] = Field(
        (),
        description="Gauges whose frequency curves stand on the page; none named: those with most to look at.",
    )
    all_figures: Literal["none", "png", "svg"] = Field(
        "none", description="Draw the frequency curve of every gauge into work/atsite/figures."
    )


class Skew(_Part):
    """Generalized skew: which gauges shape it, which models are tried, and how it enters the fits."""

    source: Literal["fitted", "constant", "map"] = Field(
        "fitted",
        description="`fitted`: from this study's gauges; `constant`: the given skew and mean square error; `map`: a given GeoTIFF.",
    )
    minimum_record_years: float = Field(
        25.0,
        ge=12,
        description="Pseudo record length a gauge needs to shape the model, years (common practice: 25 to 35).",
    )
    exclude: tuple[Literal[SCREENING_FLAGS], ...] = Field(  # type: ignore[valid-type]
        ("trend", "change_point"),
        description="Screening flags that keep a gauge out of the model although the study uses it.",
    )
    regressions: tuple[tuple[str, ...], ...] = Field(
        (),
        description="Sets of attributes to try; none named: `area` and every declared attribute, one at a time.",
    )
    by_region: bool = Field(True, description="Try a constant for every region.")
    surface: bool = Field(True, description="Try a surface on which neighbouring gauges inform each other.")
    model: str = Field(
        "",
        description="The model to use (`constant`, `region`, `surface`, or its attributes joined by ` + `); blank: the evidence decides.",
    )
    why: str = Field("", description="Reason for a fixed model or a given skew; printed in the report.")
    given_skew: float | None = Field(None, description="With `source: constant`: the generalized skew.")
    given_mse: float | None = Field(None, gt=0, description="With `source: constant`: its mean square error.")
    given_map: str = Field(
        "",
        description="With `source: map`: a GeoTIFF in longitude and latitude, band 1 skew, band 2 mean square error.",
    )
    map_cell_degrees: float | None = Field(
        None, gt=0, description="Cell of the skew map, degrees; blank: about 100 cells across."
    )
    map_reach_km: float | None = Field(
        None,
        gt=0,
        description="The map is blank farther than this from every gauge of the model; blank: twice the distance within which nine of ten of them have a neighbour.",
    )
    adopted: Literal["weighted_skew", "station"] = Field(
        "weighted_skew", description="The fit that speaks for the record of a gauge."
    )

    @property
    def attributes(self) -> tuple[str, ...]:
        """Attributes that the named regressions use."""
        return tuple(dict.fromkeys(name for names in self.regressions for name in names))

    @model_validator(mode="after")
    def _what_is_given_is_whole(self) -> Skew:
        if self.source == "constant" and (self.given_skew is None or self.given_mse is None):
            raise ValueError("source: constant needs given_skew and given_mse")
        if self.source == "map" and not self.given_map:
            raise ValueError("source: map needs given_map")
        if (self.model or self.source != "fitted") and len(self.why.strip()) < 3:
            raise ValueError("a fixed model or a given skew needs a reason in `why`")
        return self


class Move(_Part):
    """A gauge that the analyst puts into another region than the inputs say."""

    gauge_id: str
    to: str = Field(description="The region that takes the gauge; blank: no region.")
    why: str = Field(min_length=3, description="The written reason; printed in the report.")


class PinnedDistribution(_Part):
    """A distribution that the analyst fixes for a pool."""

    pool: str
    distribution: Distribution
    why: str = Field(min_length=3)


class HandPool(_Part):
    """A pool that the analyst puts together gauge by gauge."""

    pool: str = Field(min_length=1, description="Name of the pool.")
    gauges: tuple[str, ...] = Field(min_length=1, description="Its gauges, by identifier.")
    why: str = Field(min_length=3, description="The written reason; printed in the report.")


class AttributeWeight(_Part):
    """How much an attribute counts where the likeness of sites is measured."""

    attribute: str = Field(description="Name of a declared attribute, or `area`.")
    weight: float = Field(
        ge=0, description="Weight of the squared difference of the scaled attribute; 0: it does not count."
    )


PoolingMethod = Literal["regions", "clusters", "influence"]


class Pooling(_Part):
    """How gauges are pooled, tested and given a growth curve."""

    method: PoolingMethod = Field(
        "regions",
        description="`regions`: given ones; `clusters`: of attributes; `influence`: a pool of its own around every gauge and target.",
    )
    compare: tuple[Literal["one", "regions", "clusters", "influence"], ...] = Field(
        ("one", "regions", "clusters", "influence"),
        description="Ways of pooling compared by leave-one-out error; none: no comparison.",
    )
    regions: Literal["column", "polygons", "one"] = Field(
        "column",
        description="`column`: gauges.csv says; `polygons`: regions.gpkg says; `one`: all gauges together.",
    )
    pools: tuple[HandPool, ...] = Field(
        (), description="Pools put together by hand, which take their gauges out of the regions or clusters."
    )
    moves: tuple[Move, ...] = Field(
        (), description="Gauges moved between pools, with reasons; those of the ledger are added."
    )
    attributes: tuple[str, ...] = Field(
        (),
        description="Attributes that say how alike sites are; none named: `area` and every declared attribute known at all sites.",
    )
    attribute_weights: tuple[AttributeWeight, ...] = Field(
        (), description="Weights of attributes where they are not 1."
    )
    distance_weight: float = Field(
        1.0, ge=0, description="Weight of the distance on the ground beside the attributes; 0: none."
    )
    fit_weights: bool = Field(
        False,
        description="Fit the weights of the attributes by leave-one-out error of growth factors (for regions of influence).",
    )
    clusters: int | None = Field(
        None, ge=1, description="Number of clusters; blank: by size and H, then labelled `after selection`."
    )
    cluster_gauges: int = Field(
        20, ge=5, description="Gauges of a typical cluster (little is gained beyond 20)."
    )
    cluster_years: int = Field(500, ge=100, description="Station-years of a typical cluster.")
    influence_years: int = Field(
        500,
        ge=50,
        description="Station-years of a region of influence: five times the return period of interest.",
    )
    influence_gauges: int = Field(8, ge=3, description="Gauges of a region of influence, at least.")
    own_record: Literal["include", "leave_out"] = Field(
        "include", description="Whether a gauge's own record is in its region of influence."
    )
    distributions: tuple[PinnedDistribution, ...] = Field(
        (), description="Distributions fixed for a pool, with reasons."
    )
    simulations: int = Field(
        1000, ge=100, description="Simulated regions for the heterogeneity and fit measures."
    )
    close_call_simulations: int = Field(
        10000, ge=100, description="Used when H lies within two simulation errors of 1 or 2."
    )
    growth_simulations: int = Field(
        1000, ge=100, description="Simulated regions for the growth-curve intervals."
    )
    anderson_darling_replicates: int = Field(
        500,
        ge=0,
        description="Replicates of the Anderson-Darling test of pools whose L-skew exceeds 0.23; 0: no test.",
    )
    year_bootstrap: int = Field(
        0,
        ge=0,
        description="Resamplings of whole water years over all gauges, as a second route to growth-curve errors; 0: none.",
    )
    minimum_peaks: int = Field(
        10, ge=8, description="Peaks a gauge needs to enter L-skew and L-kurtosis averages."
    )
    validation_peaks: int = Field(
        20, ge=10, description="Peaks a gauge needs to be compared with in the leave-one-out comparison."
    )
    sheets: tuple[str, ...] = Field(
        (),
        description="Pools with a sheet of their own; none named: all regions or clusters, or the first regions of influence that ask for a look.",
    )


class IndexFlood(_Part):
    """The index flood and its regression on catchment attributes."""

    statistic: Literal["median", "mean"] = Field(
        "median", description="Sample statistic that scales the growth curve."
    )
    attributes: tuple[str, ...] = Field(
        (),
        description="Attributes in the regression, by name; `area` is taken as log10. None named: those of `regression`.",
    )
    by_region: bool = Field(False, description="Give every region its own intercept.")


class AdoptedRoute(_Part):
    """A route that the analyst adopts at one target, or at all."""

    route: Literal["growth_curve", "quantile_regression", "routes_combined", "stream_transfer"] = Field(
        description="The route adopted for all probabilities."
    )
    target_id: str = Field("", description="The target; blank: every target.")
    why: str = Field(min_length=3, description="The written reason; printed in the report.")


class Regression(_Part):
    """Regression of flood quantiles on catchment attributes, and which route the study adopts."""

    attributes: tuple[str, ...] = Field(
        (),
        description="Attributes in the equations, by name; `area` is taken as log10. None named: the best subset, which the report asks you to name here.",
    )
    largest_subset: int = Field(5, ge=1, le=8, description="Attributes in a subset that is tried, at most.")
    regions: Literal["one", "intercepts", "separate"] = Field(
        "one",
        description="`one` equation; own `intercepts` for every region; or `separate` coefficients for every region.",
    )
    model_variance: Literal["reml", "moments", "bayes"] = Field(
        "reml", description="How the model-error variance is estimated."
    )
    largest_inflation: float = Field(
        5.0, gt=1, description="Variance inflation above which a subset is not chosen."
    )
    transfer_area_ratio: tuple[float, float] = Field(
        (0.5, 1.5),
        description="Target area over gauge area within which a gauge on the same stream informs the target.",
    )
    adopt: tuple[AdoptedRoute, ...] = Field(
        (), description="Routes that the analyst adopts, with reasons; otherwise the evidence decides."
    )


class Editions(_Part):
    """Finished runs kept under a name (`wrackline freeze`), and the one that a new run is compared with."""

    folder: str = Field("editions", description="Folder of the editions, relative to the study file.")
    previous: str = Field(
        "",
        description="Name of the edition that the run is compared with; blank: the run is compared with none.",
    )


class StudyConfig(_Part):
    """A whole study's configuration."""

    study: About = Field(default_factory=About, description=About.__doc__ or "")
    inputs: Inputs = Field(default_factory=Inputs, description=Inputs.__doc__ or "")
    units: Units = Field(default_factory=Units, description=Units.__doc__ or "")
    water_year_starts: int = Field(
        10,
        ge=1,
        le=12,
        description="First month of the water year, which is named by the calendar year in which it ends.",
    )
    attributes: dict[str, Attribute] = Field(
        default_factory=dict, description="Catchment attributes by column name."
    )
    output: str = Field("results", description="Folder for the results, relative to the study file.")
    seed: int = Field(
        20261001, ge=0, description="Seed of every random stream; the same seed gives the same study."
    )
    confidence: Fraction = Field(0.90, description="Probability content of all intervals.")
    aeps: Aeps = Field(default_factory=Aeps, description=Aeps.__doc__ or "")
    flags: Flags = Field(default_factory=Flags, description=Flags.__doc__ or "")
    screening: Screening = Field(default_factory=Screening, description=Screening.__doc__ or "")
    dependence: Dependence = Field(default_factory=Dependence, description=Dependence.__doc__ or "")
    at_site: AtSite = Field(default_factory=AtSite, description=AtSite.__doc__ or "")
    skew: Skew = Field(default_factory=Skew, description=Skew.__doc__ or "")
    pooling: Pooling = Field(default_factory=Pooling, description=Pooling.__doc__ or "")
    index_flood: IndexFlood = Field(default_factory=IndexFlood, description=IndexFlood.__doc__ or "")
    regression: Regression = Field(default_factory=Regression, description=Regression.__doc__ or "")
    editions: Editions = Field(default_factory=Editions, description=Editions.__doc__ or "")

    @model_validator(mode="after")
    def _attributes_exist(self) -> StudyConfig:
        for part, names in (
            ("index_flood", self.index_flood.attributes),
            ("regression", self.regression.attributes),
            (
                "pooling",
                (*self.pooling.attributes, *(given.attribute for given in self.pooling.attribute_weights)),
            ),
        ):
            unknown = [name for name in names if name != "area" and name not in self.attributes]
            if unknown:
                raise ValueError(f"{part}.attributes names {unknown}, which `attributes` does not declare")
        unknown = [name for name in self.skew.attributes if name != "area" and name not in self.attributes]
        if unknown:
            raise ValueError(f"skew.regressions names {unknown}, which `attributes` does not declare")
        return self

    @model_validator(mode="after")
    def _attribute_names_are_free(self) -> StudyConfig:
        taken = sorted(set(self.attributes) & RESERVED_COLUMNS)
        if taken:
            raise ValueError(
                f"attributes cannot be named {', '.join(taken)}: the tables have such columns already"
            )
        return self

    @property
    def attributes_in_use(self) -> tuple[str, ...]:
        """Declared attributes that some section of the study names in its own `attributes`, sorted."""
        sections = (getattr(self, name) for name in type(self).model_fields)
        named = {
            a
            for section in sections
            if isinstance(section, _Part)
            for a in getattr(section, "attributes", ())
        }
        return tuple(sorted(named & set(self.attributes)))

    @property
    def flow_in_m3s(self) -> float:
        """Cubic metres per second in one unit of the study's flows."""
        return 1.0 if self.units.flow == "m3/s" else 0.3048**3

    @property
    def area_in_km2(self) -> float:
        """Square kilometres in one unit of the study's areas."""
        return 1.0 if self.units.area == "km2" else 1.609344**2
