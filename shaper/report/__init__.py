"""The report: one HTML page that holds everything and asks the network for nothing."""

from shaper.report.page import Picture as Picture
from shaper.report.page import Report as Report
from shaper.report.page import report_page as report_page
