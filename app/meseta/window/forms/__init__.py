"""Forms made from the recipe's fields: one editor a kind of setting, one form a section."""

from meseta.window.forms.form import SectionForm

__all__ = ["SectionForm"]
