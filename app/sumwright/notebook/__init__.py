"""The notebook: sheets that are kept, an append-only log of entries, who may do what, and the settings of a server.

`store` keeps, `desk` decides who may, `autosave` saves without being asked, `bundle` carries a whole notebook as one
open file. Nothing in here knows the page.
"""
