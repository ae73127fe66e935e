"""Hostile requests, made from the OpenAPI document: valid, almost valid and wrong in every parameter.

`WAXWANE_TEST_HOSTILE` sets how many are made in all; `WAXWANE_TEST_HOSTILE_URL` sends them to a running server.
"""

from typing import Any

from tests.hostile import hostile_schema, hostile_settings, judge

schema = hostile_schema()


@schema.parametrize()  # type: ignore[untyped-decorator]  # the library declares none
@hostile_settings
def test_no_request_breaks_the_edge(case: Any) -> None:
    """Whatever the document lets a caller send is answered with 200 or with a problem that names a field."""
    judge(case.call())
