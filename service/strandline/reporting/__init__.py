"""The report of an incident: facts of a stretch of time, in sentences, tables and a picture.

`facts` says what is known, `holding`, `delays` and `bursts` work out what follows from it, `sentences`, `tables` and
`picture` tell it, `html` and `markdown` write it: all pure. `gathering` reads a running feed, `http` answers.
"""
