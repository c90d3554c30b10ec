"""The big answers: a question, its answer, how sure, and a note."""

from collections.abc import Sequence
from dataclasses import dataclass
from html import escape

import streamlit as st

_STYLE = """
<style>
.stMainBlockContainer {padding-top: 3.6rem;}
.kw-answers {display: grid; gap: .75rem; margin: .25rem 0 .75rem;
  grid-template-columns: repeat(auto-fit, minmax(13.5rem, 1fr));}
.kw-answer {border-top: 3px solid var(--st-primary-color, #0072B2); padding: .55rem .1rem .2rem;
  min-width: 0;}
.kw-answer .q {font-size: .82rem; opacity: .75;}
.kw-answer .a {font-size: 1.32rem; font-weight: 650; line-height: 1.25; overflow-wrap: anywhere;}
.kw-answer .i {font-size: .9rem; overflow-wrap: anywhere;}
.kw-answer .n {font-size: .8rem; opacity: .75; overflow-wrap: anywhere;}
</style>
"""


@dataclass(frozen=True, slots=True)
class Card:
    """One answer; every part is plain text and is escaped."""

    question: str
    answer: str
    interval: str
    note: str


def cards(answers: Sequence[Card], confidence: float) -> None:
    """Draw the answers side by side, wrapping on narrow screens."""
    body = "".join(
        f'<div class="kw-answer"><div class="q">{escape(c.question)}</div>'
        f'<div class="a">{escape(c.answer)}</div>'
        f'<div class="i" title="{confidence:g} % interval">{escape(c.interval)}</div>'
        f'<div class="n">{escape(c.note)}</div></div>'
        for c in answers
    )
    st.html(f'{_STYLE}<div class="kw-answers">{body}</div>')
