"""The embedded service runner: everything `make demo` and `make test` need, with nothing installed by hand.

Start reading in `demo` (what is started, in which order, and how it stops); `postgresql` runs the embedded
database, `processes` starts children that cannot outlive us, `installation` keeps what is generated once.
`bootstrap` comes before all of these: it makes the environment that they run in.
"""
