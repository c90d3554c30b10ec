"""The dashboard's navigation, and nothing else."""

import streamlit as st

from dashboard.pages import across, now, overnight, rates, report, runs


def main() -> None:
    """Draw the page that was asked for."""
    st.set_page_config(page_title="Kettlewatch", layout="wide")
    pages = [
        st.Page(runs.page, title="Runs", url_path="runs", default=True),
        st.Page(now.page, title="Now", url_path="now"),
        st.Page(overnight.page, title="Overnight", url_path="overnight"),
        st.Page(rates.page, title="Rates", url_path="rates"),
        st.Page(across.page, title="Across runs", url_path="across"),
        st.Page(report.page, title="Report", url_path="report"),
    ]
    st.navigation(pages, position="top").run()
