"""From captures to numbers to decisions; never opens an instrument.

The vocabulary stands here (`captures`, `measurement`, `columns`, `quantities`, `flags`, `errors`,
`cautions`); the pure core in `waveform`, `junction`, `dark`, `decide` and `lot`; the edge, where files
and pictures are, in `files` and `pictures`.
"""
