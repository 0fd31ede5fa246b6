"""Tables of the scores folder."""

from __future__ import annotations

from jointmap.schema.columns import Column, Table, stamp, text

_RUN = Column("run", "int64", "", "number of the run, from 0", True)
_WHO = text("estimator", "whose")
_ROBOT = text("robot", "whose, or `team`")


def _real(name: str, unit: str, meaning: str, *dimensions: int) -> Column:
    return Column(name, "float64", unit, meaning, False, dimensions or (2, 3))


def _whole(name: str, meaning: str) -> Column:
    return Column(name, "int64", "", meaning, True)


def _figures() -> tuple[Column, ...]:
    return (
        _real("raw", "", "root mean square of the differences from the reference"),
        _real("floor", "", "what an estimator without any error would score"),
        _real("value", "", "corrected for the reference's own error; empty where it cannot be"),
        _real("lower", "", "of the interval that holds the figure against the truth, this run"),
        _real("upper", "", "of it"),
        Column("n", "int64", "", "values", True),
        text("note", "what to mind", required=False),
        _real("independent", "", "effective number of independent values, or of segments"),
        _real("repeat_lower", "", "block bootstrap: what another stretch like this may give"),
        _real("repeat_upper", "", "of it"),
        _real("block_s", "s", "block length (Politis & White)"),
        _whole("blocks", "blocks of a bootstrap sample"),
    )


def _scores() -> Table:
    return Table(
        "scores",
        "SCORES/scores.csv",
        "one row per estimator, robot, part of the reference and quantity",
        (
            _RUN,
            _WHO,
            _ROBOT,
            text("part", "`checked` or `weak`: how well the reference is checked there"),
            text("quantity", "position, heading, relative position, between position ..."),
            text("over", "`length_m`, `time_s`, `between`, `tie:now` ...", required=False),
            _real("size", "", "of the segments"),
            text("unit", "of the figures"),
            *_figures(),
            text("case", "dependence in force: same, independent or unknown"),
        ),
        "With the dependence unknown there is no value: the truth lies between the limits.",
    )


def _consistency() -> Table:
    return Table(
        "consistency",
        "SCORES/consistency.csv",
        "whether the claimed covariance tells how wrong the estimate is",
        (
            _RUN, _WHO, _ROBOT,
            text("case", "dependence in force"),
            text("basis", "datum in which both sides are compared"),
            _whole("n", "instants"),
            _real("nees", "", "normalised square per degree of freedom, covariance of the case"),
            _real("rank", "", "mean rank of that covariance"),
            _real("factor", "", "by which the claimed variances would have to be multiplied"),
            _real("lower", "", "of the interval of the factor"),
            _real("upper", "", "of it"),
            _real("band_lower", "", "of an honest claim, with the effective number of values"),
            _real("band_upper", "", "of it"),
            _real("effective", "", "effective number of independent values in time"),
            _real("impossible", "", "share of instants that claim less than the batch allows"),
            _real("growth", "", "factor of the second half of the run over that of the first"),
            _real("growth_lower", "", "of its interval"),
            _real("growth_upper", "", "of it"),
            text("verdict", "overconfident, conservative, not contradicted or no verdict"),
            text("reason", "from what"),
            *(_real(f"inside_{p}", "", f"share inside the claimed {p} % region")
              for p in (50, 90, 95, 99)),
        ),
    )  # fmt: skip


def _compare() -> Table:
    return Table(
        "compare",
        "SCORES/compare.csv",
        "paired differences of two estimators over common instants",
        (
            _RUN, text("a", "estimator"), text("b", "estimator"),
            text("quantity", "as in scores.csv"), text("over", "as there", required=False),
            _real("size", "", "as there"), _whole("n", "values"),
            _real("support", "", "common instants as a share of the longer estimate"),
            text("alignment", "the same for both"),
            _real("value_a", "", "figure of a"), _real("value_b", "", "figure of b"),
            _real("value", "", "a minus b"),
            _real("lower", "", "interval, this run"), _real("upper", "", "of it"),
            _real("repeat_lower", "", "block bootstrap"), _real("repeat_upper", "", "of it"),
            text("verdict", "in words"),
        ),
    )  # fmt: skip


def _rest() -> tuple[Table, ...]:
    return (
        Table("coverage", "SCORES/coverage.csv", "share of the run that was reported",
              (_RUN, _WHO, _ROBOT, _whole("instants", "of the run"),
               _whole("answered", "with an estimate"), _whole("gradeable", "of them checked or weak"),
               _whole("weak", "of them weak"), _real("tolerance_s", "s", "in time"),
               _whole("rows", "of the file that have a pose"),
               _whole("dropped", "rows of the file without a pose"),
               _real("clock_s", "s", "to add for any overlap, where there is none"),
               _real("completion", "", "answered / instants"))),
        Table("shared", "SCORES/sharing.csv", "what the robots had in common",
              (_RUN, _ROBOT, _real("share_now", "", "of time tied to another robot now"),
               _real("share_earlier", "", "of time tied to what another robot saw before"),
               _whole("encounters", "measurements between robots"),
               _real("longest_without_s", "s", "longest time without a tie"))),
        Table("flaws", "SCORES/flaws.csv", "what is wrong with an estimate as such",
              (_RUN, _WHO, _ROBOT, text("kind", "clock, frame, covariance, jump, diverged ..."),
               text("text", "in words"))),
        Table("order", "SCORES/order.csv", "order of finish by position, common instants only",
              (_RUN, _whole("rank", "from 1"), _WHO, _real("value_m", "m", "corrected figure"),
               _real("certainty", "", "that it is not worse than the next"),
               _whole("n", "instants"), _real("support", "", "share of the longest estimate"))),
        Table("errors", "SCORES/errors.csv", "errors over time after alignment",
              (_RUN, _WHO, _ROBOT, *stamp("t_s", "survey time", ns=False),
               _real("position_m", "m", "length of the position error"),
               _real("error_x_m", "m", "estimate minus reference"),
               _real("error_y_m", "m", "estimate minus reference"),
               _real("error_z_m", "m", "estimate minus reference", 3),
               _real("error_heading_rad", "rad", "estimate minus reference"),
               _real("reference_sigma_m", "m", "the reference's own uncertainty, all axes"),
               _real("path_m", "m", "path of the robot so far"),
               text("tie", "`now`, `earlier` or `none`"),
               _real("since_tie_s", "s", "since the last tie"),
               text("trust", "of the reference there"))),
        Table("runs", "SCORES/runs.csv", "differences of the same pairs over several runs",
              (text("a", "estimator"), text("b", "estimator"), text("quantity", "as in scores.csv"),
               _whole("runs", "how many"), _real("mean", "", "difference a minus b"),
               _whole("worse_in", "runs in which a was worse"),
               _real("p", "", "signed-rank test over runs; empty under six runs"),
               text("note", "how"))),
    )  # fmt: skip


SCORE_TABLES: tuple[Table, ...] = (_scores(), _consistency(), _compare(), *_rest())
#: Stem of the file of each table.
SCORE_FILES = {t.name: t.file.removeprefix("SCORES/").removesuffix(".csv") for t in SCORE_TABLES}
