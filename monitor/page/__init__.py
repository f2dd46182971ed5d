"""The Streamlit page: thin views over frames that a pass has stored."""
