"""What the sheet shows: one module a part of the drawing, one a fold; none knows the model."""
