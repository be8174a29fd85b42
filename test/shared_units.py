"""The individual units of the shared echo data as heads, from the truth of a recording."""

import dataclasses

from echo_data import ECHO_DATA

from ros_echo_perception.core.head import load_head


def unit_of(recording):
    """The head with the true errors of the recording's unit."""
    true = recording.truth["unit"]
    head = load_head(ECHO_DATA / "heads" / f"{recording.head}.yaml")

    def transducer(nominal, name):
        values = true[name]
        return dataclasses.replace(
            nominal,
            position_m=tuple(values["position_m"]),
            yaw_rad=values["yaw_rad"],
            resonance_hz=values["resonance_hz"],
            half_power_bandwidth_hz=values["half_power_bandwidth_hz"],
        )

    return dataclasses.replace(
        head,
        transmitter=transducer(head.transmitter, "transmitter"),
        left=transducer(head.left, "left_receiver"),
        right=transducer(head.right, "right_receiver"),
        gain_mismatch_db=true["gain_mismatch_db_left_minus_right"],
        latency_s=true["drive_latency_s"],
    )
