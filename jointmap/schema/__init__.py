"""Every input and output table and column as data; the reader, the writers and the docs use it."""

from jointmap.schema.columns import (
    AXES,
    Column,
    Dtype,
    Table,
    covariance_columns,
    covariance_lower_columns,
    pose_columns,
    sigma_columns,
    twist_columns,
    xcov_columns,
)
from jointmap.schema.inputs import DEFAULT_FILES, INPUT_TABLES, input_table
from jointmap.schema.markdown import tables_markdown
from jointmap.schema.outputs import OUTPUT_TABLES, output_table
from jointmap.schema.scores import SCORE_FILES, SCORE_TABLES

__all__ = [
    "AXES",
    "DEFAULT_FILES",
    "INPUT_TABLES",
    "OUTPUT_TABLES",
    "SCORE_FILES",
    "SCORE_TABLES",
    "Column",
    "Dtype",
    "Table",
    "covariance_columns",
    "covariance_lower_columns",
    "input_table",
    "output_table",
    "pose_columns",
    "sigma_columns",
    "tables_markdown",
    "twist_columns",
    "xcov_columns",
]
