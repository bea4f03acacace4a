"""From two records to a calibration document: what a sensor said and what a reference beside it said.

The way: `device` and `reference` read the records, `pairs` lays them over each other, `candidates` are the forms that a
correction may have, `least_squares` fits one, `blocks` tries each on time it has not seen, `choice` picks one,
`bootstrap` says how sure its parameters are, `residual` what it leaves over, `extent` where it was seen. `agreement`
and `metrics` compare two instruments by published rules; `writing` makes the document, `page` the page for people.
`fitting` is the whole way in one file.
"""
