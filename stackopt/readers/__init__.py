"""The only input door: files and text to the frozen problem, with every mistake reported at once.

The problem and the material set are TOML, tables are CSV. What a file may say is in `structure`; what must fit together
is in `checks`.
"""

from stackopt.readers.material_sets import read_material_set
from stackopt.readers.problems import read_problem
from stackopt.readers.stacks import parse_size, parse_stack, read_stack
from stackopt.readers.tables import read_level_table, read_mask_table, read_permeability_table

__all__ = [
    "parse_size",
    "parse_stack",
    "read_level_table",
    "read_mask_table",
    "read_material_set",
    "read_permeability_table",
    "read_problem",
    "read_stack",
]
