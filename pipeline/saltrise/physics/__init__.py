"""Physics: arrays in, arrays out. Depths in m, rates in mm/day, salinity in g/L.

`laws` solves the steady-flow equation, `soils` holds parameters, `profile` puts a soil in a
column, `curve` tabulates it so that a cell costs a look-up, `demand` caps it by the climate and
`salt` turns it into loads and critical depths.
"""
