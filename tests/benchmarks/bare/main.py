"""What the first paint is compared with: a bare page with two figures of eight lines."""

import numpy as np
import panel as pn
from bokeh.plotting import figure

x = np.linspace(0, 10, 4)
plots = []
for _ in range(2):
    plot = figure(width=480, height=260, tools="", toolbar_location=None)
    for k in range(8):
        plot.line(x, np.sin(x + k))
    plots.append(pn.pane.Bokeh(plot))
pn.Row(*plots).servable()
