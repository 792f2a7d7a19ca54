from oscillib.checks import Finding, Report


def test_table():
    found = (
        Finding("output", "passed"),
        Finding("purity", "failed", "purity: [0]: expected 1, got 2.\n  hint"),
        Finding("period", "not claimed"),
    )
    report = Report("mine", found)
    assert not report.passed and report.failures == found[1:2]
    assert str(report) == (
        "mine: FAILED\n"
        "  output  passed\n"
        "  purity  failed       purity: [0]: expected 1, got 2.\n"
        "                         hint\n"
        "  period  not claimed"
    )
    assert Report("mine", found[::2]).passed
    assert str(Report("mine", found[:1])) == "mine: passed\n  output  passed"
