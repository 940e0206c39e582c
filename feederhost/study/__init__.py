"""One question an engineer asks, one module: tables in, tables out."""
