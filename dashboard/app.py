"""The dashboard's navigation, and nothing else."""

import streamlit as st

from dashboard.pages import now, runs


def main() -> None:
    """Draw the page that was asked for."""
    st.set_page_config(page_title="Kettlewatch", layout="wide")
    pages = [
        st.Page(runs.page, title="Runs", url_path="runs", default=True),
        st.Page(now.page, title="Now", url_path="now"),
    ]
    st.navigation(pages, position="top").run()
