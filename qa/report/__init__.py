"""Figures, pages and the dated PDF.

`content` says what a report is made from, `scanner` lays one scanner's out, `render` fills the templates and makes the PDF,
`files` keeps it. Figures come from `trend` and `picture`, in the one style of `style`; figures in text from `numbers`.
"""
