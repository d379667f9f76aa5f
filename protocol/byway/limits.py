"""
Every bound on the wire, with its reason.

The daemon tells the ones that a peer must keep in `welcome`; a peer in another language reads
them there. Nothing here is a promise about the size of a site: only about one message.
"""

from typing import Final

#: The version of SPEC.md that this code speaks. There is one until there are two.
spec_version: Final = 1

#: Frames of one message, without routing ids and topic: header, body, packed columns.
frames_max: Final = 3

#: A header has eight short fields: 64 (id) + 64 (source) + 64 (epoch) + 55 (traceparent) bytes
#: of text, names and numbers below 200 more.
header_bytes_max: Final = 1024

#: A hostile body of this size (nothing but empty maps) keeps the decoder busy for about 6 ms;
#: 1 MiB would be 94 ms. Whatever is long travels as packed columns, not in bodies.
body_bytes_max: Final = 64 * 1024

#: Packed columns of one change: 2896 x 2896 cells, or half a million vertices of 16 bytes.
packed_bytes_max: Final = 8 * 1024 * 1024

#: What a daemon may send in one frame. A client gives up the connection above it: a site of
#: 800 x 800 m in cells of 0.1 m is 64 million bytes.
reply_bytes_max: Final = 128 * 1024 * 1024

#: ZeroMQ closes the connection of a peer that sends more than this in one frame, without a
#: word; it stands above the bounds so that a little too much still gets a clear error.
requests_frame_bytes_max: Final = 1024 * 1024  # a route to be guarded has 49 bytes a row
updates_frame_bytes_max: Final = 2 * packed_bytes_max

#: Names of layers, vehicles, units, obstacles, methods, sources, requests: one shape for all.
name_chars_max: Final = 64
name_pattern: Final = r"^[A-Za-z0-9][A-Za-z0-9_.:/#-]{0,63}$"

#: A sentence for a person.
text_chars_max: Final = 2000

#: Entries of any map and of any list in a body of a request or change.
map_entries_max: Final = 64
list_entries_max: Final = 1000

#: Obstacles in one change; their ids are a packed column, so this bounds work, not bytes.
obstacles_max: Final = 16_384

#: Ids in one `drop`: they are a list in the body, and a list of the longest must fit there.
drop_ids_max: Final = 900

#: Layers that one replan may leave out.
left_out_max: Final = 32

#: Columns of one message (a route has 7).
columns_max: Final = 32
column_dimensions_max: Final = 2

#: Metres from the origin of the site. Survey coordinates (northings) stay below ten million.
coordinate_m_max: Final = 1e7

#: Radians. Headings are angles, not counts of turns; beyond this their digits run out.
heading_rad_max: Final = 1e3

#: Metres along one side of a cell.
cell_m_min: Final = 0.01
cell_m_max: Final = 10.0

#: Seconds. A replan that may take longer than a minute is a campaign, not a replan.
budget_s_max: Final = 60.0

#: Seconds until an obstacle expires or a lease ends: a year and a day.
expiry_s_max: Final = 366.0 * 86_400.0

#: Seconds. What was seen longer ago is history, not a change of the site.
age_s_max: Final = 60.0

#: Metres that a beam of a range sensor may reach.
range_m_max: Final = 1000.0

#: Beams of one scan.
beams_max: Final = 65_536

#: Tracks in one change.
tracks_max: Final = 1024

#: Rows of a route that is to be guarded: 3 km in steps of 0.3 m, and some.
guard_rows_max: Final = 16_384
#: Bytes of its columns: six of 8 bytes and one of 1 a row, each rounded up.
guard_packed_bytes_max: Final = guard_rows_max * (6 * 8 + 1)

#: What nothing on a site does: it bounds the ground that a track may claim.
track_speed_mps_max: Final = 100.0
track_turn_rate_radps_max: Final = 10.0
#: Metres, and metres a second, by which a track may be wrong.
track_uncertainty_m_max: Final = 50.0
track_growth_mps_max: Final = 50.0

#: Whole numbers on the wire fit a signed 64-bit integer.
number_max: Final = 2**63 - 1

#: Changes of one source that are not yet acknowledged or refused.
unacknowledged_max: Final = 64

#: Seconds for which a daemon repeats an answer to a request that is repeated.
answers_kept_s: Final = 120.0

#: Refused numbers a daemon remembers per source, to refuse a repeat in the same words.
refusals_kept: Final = 256


def told() -> dict[str, int | float]:
    """Return the bounds that a peer must keep, as `welcome` tells them."""
    return {
        "header_bytes_max": header_bytes_max,
        "body_bytes_max": body_bytes_max,
        "packed_bytes_max": packed_bytes_max,
        "name_chars_max": name_chars_max,
        "obstacles_max": obstacles_max,
        "drop_ids_max": drop_ids_max,
        "left_out_max": left_out_max,
        "coordinate_m_max": coordinate_m_max,
        "budget_s_max": budget_s_max,
        "expiry_s_max": expiry_s_max,
        "age_s_max": age_s_max,
        "range_m_max": range_m_max,
        "beams_max": beams_max,
        "tracks_max": tracks_max,
        "guard_rows_max": guard_rows_max,
        "track_speed_mps_max": track_speed_mps_max,
        "track_turn_rate_radps_max": track_turn_rate_radps_max,
        "track_uncertainty_m_max": track_uncertainty_m_max,
        "track_growth_mps_max": track_growth_mps_max,
        "unacknowledged_max": unacknowledged_max,
        "answers_kept_s": answers_kept_s,
    }
