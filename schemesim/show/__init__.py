"""How figures are shown, whatever they are about: formats of numbers, tables as HTML, charts.

This stands below the studies, so that a result can draw itself while imports point downward
only: what is drawn is handed over as plain figures, labels and units.
"""
