"""A self-contained page about one result, for a person with a browser and nothing else."""

from recon.report.content import Content
from recon.report.page import write_page

__all__ = ["Content", "write_page"]
