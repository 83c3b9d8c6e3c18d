"""The colours that the drawn parts begin with."""

import pytest

from lagscape.app.map_view import MapView
from lagscape.app.page_link import PageLink
from lagscape.app.palette import PALETTES
from lagscape.app.workbench import Workbench

pytestmark = pytest.mark.filterwarnings("default")


@pytest.mark.parametrize("theme", ["light", "dark"])
def test_a_page_that_starts_in_a_theme_is_drawn_in_it(theme):
    from bokeh.models import Plot

    bench = Workbench(PageLink(theme=theme))
    drawn = [model for model in MapView(bench).root.get_root().references() if isinstance(model, Plot)]
    assert bench.theme == theme and drawn
    # Oracle: the palette that the page's own style sheet mirrors.
    assert {plot.background_fill_color for plot in drawn} == {PALETTES[theme].paper}
