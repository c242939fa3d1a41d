"""What the user has: a table or a plan, a model formula, and the quantities the decision hangs on.

`table` reads files, `formula` checks what may be evaluated, `cleaning` types the columns and accounts for the rows, `model`
binds the formula to the table, `focusing` reads the focus, `build` puts them together; `design`, `focus` and `study` are the
values the rest of the house uses. `planned` makes studies without data, `growth` gives any study other numbers of rows.
"""

from withstand.study.study import Study

__all__ = ["Study"]
