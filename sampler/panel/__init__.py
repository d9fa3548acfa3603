"""The panel as drawn: outline, grids of cells, keep-outs, marks."""
