"""What the controller concludes from state messages: identity, order, age by echo, grant."""

from rtctl.blocks import MODE_LIVE, STATUS_SIMULATED
from rtctl.supervisor.observe import CLOCK_DRIFT, SENT, UNKNOWN
from tests.stand import ARM_KEY, PERIOD_NS, SESSION, Stand


def test_the_age_is_growth_above_the_least_seen_whatever_the_clocks_say() -> None:
    """Two clocks far apart give age zero; a state 4 ms older than the best gives 4 ms."""
    for offset_ns in (-(10**15), 0, 10**15):
        stand = Stand()
        stand.driver.clock_offset_ns = offset_ns
        for _ in range(5):
            stand.step()
        assert int(stand.row["age_ns"]) == 0
        stand.driver.clock_offset_ns -= 4_000_000
        stand.step()
        assert int(stand.row["age_ns"]) == 4_000_000 - int(PERIOD_NS * CLOCK_DRIFT)


def test_two_clocks_that_drift_apart_do_not_look_like_a_growing_delay() -> None:
    """A driver's clock 90 ppm slow for 20 s of cycles stays within a microsecond of age zero."""
    stand = Stand()
    for _ in range(20_000):
        stand.driver.clock_offset_ns -= 90
        stand.step()
    assert int(stand.row["age_ns"]) <= 1000


def test_the_loop_delay_is_from_sending_to_the_echo() -> None:
    """A driver that hears at once and says so one cycle later shows a delay of one period; unknown before the first echo."""
    stand = Stand()
    stand.step()
    assert int(stand.row["loop_delay_ns"]) == UNKNOWN
    stand.step()
    assert int(stand.row["loop_delay_ns"]) == PERIOD_NS


def test_without_an_echo_the_delay_grows() -> None:
    """With a driver gone deaf, after 7 cycles the first message it missed was sent 6 periods ago: the delay is at least that."""
    stand = Stand()
    for _ in range(5):
        stand.step()
    stand.driver.hears = False
    for _ in range(7):
        stand.step()
    assert int(stand.row["loop_delay_ns"]) == 6 * PERIOD_NS


def test_an_echo_of_a_number_never_sent_is_ignored() -> None:
    """Numbers of the future, of another session and beyond the remembered ones do not change the delay."""
    stand = Stand()
    for _ in range(5):
        stand.step()
    stand.driver.hears = False
    for received in ((SESSION, 10**9), (SESSION + 1, 3), (SESSION, -5)):
        stand.driver.received = received
        before = int(stand.memory["link"]["echoed"])
        stand.step()
        assert int(stand.memory["link"]["echoed"]) == before
    for _ in range(SENT + 20):
        stand.step()
    assert int(stand.row["loop_delay_ns"]) > 0


def test_a_new_driver_session_is_adopted_at_rest_and_remembered_in_motion() -> None:
    """At rest a restarted driver is simply the new driver; in live it is marked as a restart."""
    stand = Stand()
    for _ in range(5):
        stand.step()
    stand.driver.session, stand.driver.sequence = 600, 0
    stand.step()
    link = stand.memory["link"]
    assert (int(link["driver_session"]), int(link["restarted"])) == (600, 0)

    stand = Stand().to_live()
    stand.driver.session, stand.driver.sequence = 601, 0
    stand.step()
    assert int(stand.memory["link"]["restarted"]) == 1
    assert stand.mode != MODE_LIVE


def test_only_the_own_grant_counts() -> None:
    """The grant number is taken only when the state names this controller as its holder."""
    stand = Stand()
    for _ in range(3):
        stand.step()
    assert int(stand.memory["link"]["grant"]) == stand.driver.grant
    stand.driver.holder = SESSION + 1
    stand.step()
    assert int(stand.memory["link"]["grant"]) == 0


def test_another_arm_is_not_taken_and_the_right_one_clears_it() -> None:
    """A foreign arm key marks the identity and leaves the joint values alone; the next right state clears the mark."""
    stand = Stand()
    stand.step()
    stand.driver.arm_key, stand.driver.q = ARM_KEY + 1, [1.0, 1.0]
    stand.step()
    link = stand.memory["link"]
    assert int(link["identity"]) == -1
    assert link["q"][:2].tolist() == [0.3, -0.2]
    stand.driver.arm_key, stand.driver.q = ARM_KEY, [0.3, -0.2]
    stand.step()
    assert int(link["identity"]) == 1


def test_simulated_is_read_from_the_status() -> None:
    """The controller knows a simulated arm only by the driver's own word."""
    stand = Stand()
    stand.step()
    assert int(stand.memory["link"]["simulated"]) == 1
    stand.driver.status &= ~STATUS_SIMULATED
    stand.step()
    assert int(stand.memory["link"]["simulated"]) == 0
