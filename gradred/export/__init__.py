"""Parts → what people open: rasters, tables, models, figures, the report."""
