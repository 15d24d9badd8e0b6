"""Tables of columns: a model with its own row order, a view that sorts, filters, copies, exports and jumps."""
