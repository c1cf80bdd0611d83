"""From extract to blocks: sources, missing codes, formulas, design rows, passes, the extract's check-up."""
