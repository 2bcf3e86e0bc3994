"""The command line: every verb parses its arguments, calls the library, prints.

``main`` holds the frame (exit codes, one-line errors), one small file holds each verb.
No file here imports a stage at the top: ``dq --help`` must answer at once.
"""
