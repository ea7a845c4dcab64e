"""What other people's programs and eyes receive: styles, metadata, pictures and the page.

Text and figures only; files are written by `io`.
"""
