"""The forms of a result: terminal, notebook, JSON, CSV, Markdown.

Each form takes the plain record that a result's ``to_dict()`` gives and knows no result class.
What is said is decided in :mod:`evidence.report.content`, how a number or a name is worded in
:mod:`evidence.report.wording`; a form only lays it out.
"""
