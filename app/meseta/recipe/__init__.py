"""Recipe: every setting of an analysis, typed, with unit, range, title and help; TOML in and out.

One module a section.  Title, unit, range, default and help of a setting are written once, on its field; forms,
``--help``, the commented recipe and error messages are all made from there.
"""

from meseta.recipe.document import Recipe
from meseta.recipe.fields import FieldInfo, Section, setting

__all__ = ["FieldInfo", "Recipe", "Section", "setting"]
