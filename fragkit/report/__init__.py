"""Tables, notebook views and figures."""

from fragkit.report._comparison import comparison_table as comparison_table
from fragkit.report._estimate import estimate_html as estimate_html
from fragkit.report._estimate import estimate_summary as estimate_summary
from fragkit.report._estimate import estimate_table as estimate_table
from fragkit.report._estimate import plot_estimate as plot_estimate
from fragkit.report._plan import plan_html as plan_html
from fragkit.report._plan import plan_summary as plan_summary
from fragkit.report._plan import plan_table as plan_table
from fragkit.report._plan import plot_plan as plot_plan
from fragkit.report._text import html_table as html_table
from fragkit.report._text import summary_lines as summary_lines
from fragkit.report._text import text_table as text_table
