"""Generated code: results as fast functions of plain arrays."""
