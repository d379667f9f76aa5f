"""
Messages and their bytes. A changed byte here is a change of protocol/SPEC.md: explain it there.

Each case: header, message, packed columns, and the frames in hex.
"""

from typing import Final

from byway import messages
from byway.frames import Header
from byway.packed import Column

GOLDEN: Final[dict[str, tuple[Header, messages.Message, bytes, tuple[str, ...]]]] = {
    "hello": (
        Header("hello", id="a-1"),
        messages.Hello(versions=[1], client="5f2a9c10"),
        b"",
        (
            "83a17601a46b696e64a568656c6c6fa26964a3612d31",
            "82a876657273696f6e739101a6636c69656e74a83566326139633130",
        ),
    ),
    "replan": (
        Header("replan", id="a-2", epoch="e7", traceparent="00-ab-cd-01"),
        messages.Replan(
            vehicle="tug",
            unit="tug-3",
            start=(2.0, 2.0, 0.0),
            goal=(40.0, 22.0, 1.5),
            budget_s=0.0625,
            seed=7,
            leave_out=["unit.tug-3"],
        ),
        b"",
        (
            (
                "85a17601a46b696e64a67265706c616ea26964a3612d32a565706f6368a26537ab74726163657061"
                "72656e74ab30302d61622d63642d3031"
            ),
            (
                "87a776656869636c65a3747567a4756e6974a57475672d33a5737461727493cb4000000000000000"
                "cb4000000000000000cb0000000000000000a4676f616c93cb4044000000000000cb403600000000"
                "0000cb3ff8000000000000a86275646765745f73cb3fb0000000000000a47365656407a96c656176"
                "655f6f757491aa756e69742e7475672d33"
            ),
        ),
    ),
    "drop": (
        Header("drop", source="5f2a9c10", number=300, epoch="e7"),
        messages.Drop(layer="stacks", ids=["pile-7"]),
        b"",
        (
            (
                "85a17601a46b696e64a464726f70a6736f75726365a83566326139633130a66e756d626572cd012c"
                "a565706f6368a26537"
            ),
            "82a56c61796572a6737461636b73a369647391a670696c652d37",
        ),
    ),
    "patch": (
        Header("patch", source="5f2a9c10", number=2),
        messages.Patch(
            layer="lidar",
            corner_m=(20.0, 0.0),
            cell_m=0.125,
            columns={"cells": Column(dtype="u1", shape=(2, 3), offset=0)},
        ),
        bytes([0, 1, 2, 0, 1, 2, 0, 0]),
        (
            "84a17601a46b696e64a57061746368a6736f75726365a83566326139633130a66e756d62657202",
            (
                "84a56c61796572a56c69646172a8636f726e65725f6d92cb4034000000000000cb00000000000000"
                "00a663656c6c5f6dcb3fc0000000000000a7636f6c756d6e7381a563656c6c7383a56474797065a2"
                "7531a57368617065920203a66f666673657400"
            ),
            "0001020001020000",
        ),
    ),
    "answer": (
        Header("answer", id="a-2", epoch="e7"),
        messages.AnswerMessage(
            unit="tug-3",
            revision=17,
            first_s=0.0078125,
            waited_s=0.0,
            total_s=0.03125,
            outcome=b"\x80",
        ),
        bytes(8),
        (
            "84a17601a46b696e64a6616e73776572a26964a3612d32a565706f6368a26537",
            (
                "87a4756e6974a57475672d33a87265766973696f6e11a766697273745f73cb3f80000000000000a8"
                "7761697465645f73cb0000000000000000a7746f74616c5f73cb3fa0000000000000a8617474656d"
                "70747301a76f7574636f6d65c40180"
            ),
            "0000000000000000",
        ),
    ),
    "acknowledged": (
        Header("acknowledged", epoch="e7"),
        messages.Acknowledged(source="5f2a9c10", number=300, revision=17),
        b"",
        (
            "83a17601a46b696e64ac61636b6e6f776c6564676564a565706f6368a26537",
            "83a6736f75726365a83566326139633130a66e756d626572cd012ca87265766973696f6e11",
        ),
    ),
    "error": (
        Header("error", id="a-2", epoch="e7"),
        messages.ErrorMessage(
            code="overloaded", text="busy", facts={"waiting": 4}, retry_after_s=0.25
        ),
        b"",
        (
            "84a17601a46b696e64a56572726f72a26964a3612d32a565706f6368a26537",
            (
                "84a4636f6465aa6f7665726c6f61646564a474657874a462757379a5666163747381a77761697469"
                "6e6704ad72657472795f61667465725f73cb3fd0000000000000"
            ),
        ),
    ),
    "better": (
        Header("better", id="a-2", number=3, epoch="e7"),
        messages.BetterMessage(unit="tug-3", revision=17, elapsed_s=0.015625, outcome=b"\x80"),
        b"",
        (
            "85a17601a46b696e64a6626574746572a26964a3612d32a66e756d62657203a565706f6368a26537",
            (
                "84a4756e6974a57475672d33a87265766973696f6e11a9656c61707365645f73cb3f900000000000"
                "00a76f7574636f6d65c40180"
            ),
        ),
    ),
}

#: Bodies of the messages above with every field told, as older clients sent them.
SPELLED_OUT: Final[dict[str, str]] = {
    "hello": ("83a876657273696f6e739101a6636c69656e74a83566326139633130a8736f667477617265a0"),
    "replan": (
        "8ba776656869636c65a3747567a4756e6974a57475672d33a5737461727493cb4000000000000000"
        "cb4000000000000000cb0000000000000000a4676f616c93cb4044000000000000cb403600000000"
        "0000cb3ff8000000000000a86275646765745f73cb3fb0000000000000a66d6574686f64a4617574"
        "6fa47365656407a96c656176655f6f757491aa756e69742e7475672d33af73746172745f73706565"
        "645f6d7073cb0000000000000000b573746172745f6375727661747572655f7065725f6dcb000000"
        "0000000000aa6761705f77616e746564cb0000000000000000"
    ),
}
