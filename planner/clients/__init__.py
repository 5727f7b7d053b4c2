"""Everybody's plan: a folder of client workbooks on any `concurrent.futures` executor.

A client's workbook goes to a worker as bytes and comes back as bytes: workers read and write no
files, so that nothing about clients leaves the two folders of a run.
"""
