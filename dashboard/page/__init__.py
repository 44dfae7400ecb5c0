"""The page of a run in the browser: a Bokeh server on the loopback address.

One thread (:mod:`~dashboard.page.feed`) follows the run and fills a store; each opened page
(:mod:`~dashboard.page.session`) pulls from it what is new. ``python -m dashboard.page`` runs it.
"""
