"""Reports: the answers of a study as sentences, tables, figures, a page and a first screen."""
