"""Documents of a run for people who were not there: the report, set by typst from one template."""
