"""One Result in, several reports out; every figure is defined once, in `records`, with its unit and rounding.

==============  ==================================================
`quantities`    what a reported quantity is: name, unit, rounding
`records`       the frozen records that hold them
`figures`       a Result -> a `Report`
`voices`        ... the part about each voice
`faults`        ... the part about the sources, and what is left open
`segments`      states over time as stretches
`tables`        writes speech.csv, mix.csv, report.json
`finished`      the report of a finished cut
==============  ==================================================
"""
