"""The dashboard: a piece of work in a terminal. Nothing here computes; every number comes from `meshctl.work`.

Public: in `app` the application, in `actions` all keys, in `tints` all colours.
"""
