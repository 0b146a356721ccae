"""How strong a flaw would have to be to overturn the finding.

Pure functions on a design, an estimate or arrays, one room a cause of doubt;
:func:`pipeline.scrutiny.scrutinise.scrutinise` asks them all.
"""
