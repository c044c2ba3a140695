"""How good the scores are: measures, intervals, comparisons, tables and figures."""
