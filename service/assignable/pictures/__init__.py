"""Pictures of results, as SVG that needs nothing else: no script, no style sheet, no font, no reference out.

``charts`` draws control charts, ``capability`` a capability study, ``curves`` run lengths and operating
characteristics; ``svg``, ``text``, ``scale``, ``axis`` and ``thin`` are what they are made of. A picture draws a
result that was computed elsewhere: nothing is calculated here but places on the paper.
"""
