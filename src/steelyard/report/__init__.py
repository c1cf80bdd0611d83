"""The report of an answer: figures, tables, one HTML page, and the files of a run."""
