"""Says loudly when the page tests could not run: a missing browser must not look like success."""

from browser import CHROMIUM, DRIVER


def pytest_terminal_summary(terminalreporter):
    if CHROMIUM is None or DRIVER is None:
        terminalreporter.write_sep("!", "PAGE TESTS DID NOT RUN", red=True, bold=True)
        terminalreporter.write_line(
            "The report was not opened in a browser. Debian: "
            "apt-get install --no-install-recommends chromium chromium-driver"
        )
