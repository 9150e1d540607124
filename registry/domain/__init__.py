"""The trade's nouns and rules: frozen values that know nothing of tables, HTTP or the clock (times come in as
arguments).
"""
