"""The report's sections, one module each.

A module has TITLE and `blocks(results, figures)`, an iterator that is empty where the results have nothing for it,
and may have `headlines(results)`, pairs of (rank, sentence) for the answer: the lowest three ranks are printed.
"""
