"""One page that tells what a pair of runs says: figures, tables and words in one file that needs no network.

Numbers first: :mod:`breakstep.report.page.data` makes one plain dictionary from recorded profiles, and the page
shows that dictionary and nothing else. So what ``--json`` writes is what the page says.
"""
