"""Figures, pages and the dated PDF.

From records to pages: `content` and `fleet_content` say what a report is made from; `streams` gathers what belongs together
over time; `sections`, `images`, `maps` and `data` turn it into finished words, figures and files; `page` is what the template
places; `scanner`, `fleet`, `pin_up`, `board` and `mail` lay out one output each; `render` fills templates and makes the PDF,
`fetcher` serves it its own files and no others, `files` keeps it.

Figures: `style` is the one house style, `plot` the plotting area, `chart` and `trend` the chart over time, `spark` its small
sister, `picture` the image with regions. Figures in text: `numbers` and `words`.
"""
