"""Pictures as SVG: plain functions from numbers to a text that stands by itself or inside a page.

Every picture carries its title and, in words, what it shows. Lines differ by their dashes and are labelled where they
end, so that nothing hangs on colour; ink and paper follow the reader's light or dark setting.
"""
