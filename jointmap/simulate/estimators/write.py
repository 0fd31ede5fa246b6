"""The estimators' output as ``online/NAME`` of a survey folder."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from jointmap.atomic import new_folder
from jointmap.ingest.survey import Survey
from jointmap.simulate.estimators.run import DECLARED, EstimatorSettings, Output, estimate
from jointmap.simulate.files import toml_value

_MARKER = "estimator.toml"


def write_online(
    survey: Survey, settings: EstimatorSettings | None = None, *, replace: bool = False
) -> dict[str, int]:
    """Run the textbook estimators over a survey and write what they report into its folder.

    Returns
    -------
    dict
        Number of poses by estimator.

    Raises
    ------
    SurveyError
        The survey is not planar.
    OutputExistsError
        An estimator of the name is there and may not be replaced.
    """
    counts = {}
    for output in estimate(survey, settings):
        with new_folder(survey.path / "online" / output.name, replace=replace, marker=_MARKER) as f:
            _write(output, f)
        counts[output.name] = sum(len(r.t_s) for r in output.reports.values())
    return counts


def _write(output: Output, folder: Path) -> None:
    frame, evidence = DECLARED[output.name]
    said = {"frame": frame, "covariance": "fixed-axes", "evidence": evidence, "data": "same"}
    text = "".join(f"{key} = {toml_value(value)}\n" for key, value in said.items())
    (folder / _MARKER).write_text(text, encoding="utf-8")
    i, j = np.triu_indices(3)
    for robot, report in output.reports.items():
        columns = [report.t_s[:, None], report.pose, report.cov[:, i, j]]
        header = "t_s,x_m,y_m,yaw_rad,cov_x_x,cov_x_y,cov_x_yaw,cov_y_y,cov_y_yaw,cov_yaw_yaw"
        # Small variances need significant digits, not decimals.
        style = ["%.6f"] + ["%.6f"] * 3 + ["%.9e"] * 6
        with open(folder / f"{robot}.csv", "w", encoding="utf-8") as file:
            np.savetxt(
                file, np.concatenate(columns, axis=1), style, ",", header=header, comments=""
            )
    if any(m.names for m in output.maps.values()):
        lines = ["robot,landmark,x_m,y_m,cov_x_x,cov_x_y,cov_y_y"]
        for robot, seen in output.maps.items():
            for k, name in enumerate(seen.names):
                x, y = seen.position[2 * k : 2 * k + 2]
                p = seen.cov[2 * k : 2 * k + 2, 2 * k : 2 * k + 2]
                lines.append(
                    f"{robot},{name},{x:.6f},{y:.6f},{p[0, 0]:.9e},{p[0, 1]:.9e},{p[1, 1]:.9e}"
                )
        (folder / "map.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
