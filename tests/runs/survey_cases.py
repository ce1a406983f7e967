"""Helpers of the survey tests."""


def set_values(where, value):
    def change(data):
        data.t2m.values[where] = value
        return data

    return change


def only(report):
    assert len(report.faults) == 1, report.text()
    return report.faults[0]
