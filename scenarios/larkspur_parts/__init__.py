"""Parts of the Larkspur Divide demo: an invented region, one module per subject.

`make_larkspur.py` next to this package calls them in order; nothing here is imported by lmpgap.
"""
