"""The page for a design review: one HTML file that needs nothing else, on a screen, offline or printed.

`page.py` puts the sections in order; each section is a file with `section(review) -> Html`. `html.py` escapes everything:
names and titles come from users.
"""
