"""How an answer looks: forms of the same figures; knows only tables, never HTTP."""
