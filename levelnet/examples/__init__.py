"""The three main uses, each a short script in cells that also opens as a notebook.

Run one with ``python -m levelnet.examples.how_many_levels``, or open its file in an editor that
knows cells (``# %%``). Cosmology and instrument in them are INVENTED.
"""
