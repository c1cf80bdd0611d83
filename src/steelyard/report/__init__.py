"""What leaves the house: figures, HTML, tables and the record of a run, with small counts hidden."""
