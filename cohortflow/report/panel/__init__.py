"""The what-if panel of the page and of notebooks."""

from cohortflow.report.panel.data import PanelData as PanelData
from cohortflow.report.panel.data import panel_data as panel_data
from cohortflow.report.panel.render import Panel as Panel
from cohortflow.report.panel.render import panel as panel
