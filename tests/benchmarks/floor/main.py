"""The floor to compare the sheet with: the same wire moving one figure of one line, and nothing else."""

import numpy as np
import panel as pn
from bokeh.models import ColumnDataSource, Range1d
from bokeh.plotting import figure
from sumwright.views.wire import Wire

PAGE = """
{% extends base %}
{% block inner_head %}<meta charset="utf-8"><title>floor</title><link rel="icon" href="data:,">
<script type="module">
import {Line} from './app/static/wire.js'
const line = new Line(() => {}, () => {})
window.sumwright = {line, act: (act, newest) => line.act(act, newest)}
</script>{{ bokeh_css }}{{ bokeh_js }}{% endblock %}
{% block contents %}<input type="range" min="0" max="10" step="0.001" data-v="north">{{ embed(roots.wire) }}{{ embed(roots.figure) }}
<script>document.querySelector('input').addEventListener('input', e => sumwright.act({value: e.target.valueAsNumber}, 'value'))</script>
{% endblock %}
"""

source = ColumnDataSource({"x": np.array([0.0, 10.0]), "y": np.zeros(2, np.float32)})
plot = figure(width=480, height=260, x_range=Range1d(0, 10), y_range=Range1d(-15, 15), tools="", toolbar_location=None)
plot.line("x", "y", source=source)


def receive(message):
    value = message["acts"][0].get("value", 0.0)
    with pn.io.hold():
        source.data.update({"y": np.array([0.0, value], np.float32)})
        wire.send({"seq": message["seq"]})


wire = Wire(receive=receive)
page = pn.Template(PAGE)
page.add_panel("wire", wire)
page.add_panel("figure", pn.pane.Bokeh(plot))
page.servable()
