"""One contract over the real clock and the simulated one, then what each has of its own."""

import ctypes
import os
import re
import struct
import threading
from collections.abc import Callable
from pathlib import Path
from threading import Event

import pytest

from clocks import FakeClock
from motekeep.edges.clock import SystemClock, Voucher, kernel_synchronised, normalised_boot_id, read_boot_id
from motekeep.edges.ports import Clock

KERNEL_SPELLING = "1f0c8f4e-2ab1-4c39-9d1e-6b8f0f4f1a77"
SYSTEMD_SPELLING = "1f0c8f4e2ab14c399d1e6b8f0f4f1a77"


def never() -> bool | None:
    return False


@pytest.fixture(params=["real", "fake", "driven"])
def clock(request: pytest.FixtureRequest) -> Clock:
    made: dict[str, Callable[[], Clock]] = {
        "real": SystemClock,
        "fake": FakeClock,
        "driven": lambda: FakeClock(driven=True),
    }
    return made[request.param]()


def passing(clock: Clock) -> None:
    """Somebody else lets the time of a driven clock pass; the others do it by themselves."""

    def drive(clock: FakeClock) -> None:
        clock.settle(1)
        clock.advance(0.1)

    if isinstance(clock, FakeClock) and clock._driven:
        threading.Thread(target=drive, args=(clock,), daemon=True).start()


class TestContract:
    def test_boot_time_never_runs_backwards(self, clock: Clock) -> None:
        seconds = [clock.now().boot_s for _ in range(1000)]

        assert seconds == sorted(seconds)

    def test_the_boot_id_stays_and_is_32_lower_case_hexadecimal_digits(self, clock: Clock) -> None:
        first, second = clock.now().boot_id, clock.now().boot_id

        assert first == second
        assert re.fullmatch("[0-9a-f]{32}", first)

    def test_a_wait_on_a_set_event_takes_no_time_and_says_so(self, clock: Clock) -> None:
        event = Event()
        event.set()

        assert clock.wait(event, 1e9) is True

    def test_a_wait_of_no_time_or_less_returns_at_once(self, clock: Clock) -> None:
        assert clock.wait(Event(), 0) is False
        assert clock.wait(Event(), -5) is False

    def test_a_wait_without_an_event_lasts_its_seconds_of_boot_time(self, clock: Clock) -> None:
        before = clock.now()
        passing(clock)

        assert clock.wait(Event(), 0.05) is False

        # CLOCK_MONOTONIC, which waits, and CLOCK_BOOTTIME, which stamps, are read a little apart
        assert clock.now().boot_s - before.boot_s >= 0.049

    def test_the_wall_clock_keeps_its_offset_while_nobody_steps_it(self, clock: Clock) -> None:
        before = clock.now()
        passing(clock)
        clock.wait(Event(), 0.02)

        assert abs(clock.now().offset - before.offset) < 0.5

    def test_an_event_set_by_another_thread_ends_a_long_wait(self, clock: Clock) -> None:
        event = Event()
        if isinstance(clock, FakeClock) and not clock._driven:
            clock.after(5, event.set)
        else:
            threading.Timer(0.02, event.set).start()

        assert clock.wait(event, 3600) is True

    def test_a_wait_longer_than_the_platform_can_count_is_no_error(self, clock: Clock) -> None:
        event = Event()
        if isinstance(clock, FakeClock) and not clock._driven:
            clock.after(5, event.set)
        else:
            threading.Timer(0.02, event.set).start()

        assert clock.wait(event, 1e18) is True


class TestTrust:
    def test_nobody_vouches_means_untrusted(self, tmp_path: Path) -> None:
        clock = SystemClock(timesyncd_flag=tmp_path / "absent", kernel=never)

        assert clock.now().trusted is False
        assert clock.voucher() is None

    def test_the_flag_file_of_timesyncd_vouches(self, tmp_path: Path) -> None:
        flag = tmp_path / "synchronized"
        flag.touch()
        clock = SystemClock(timesyncd_flag=flag, kernel=never)

        assert clock.now().trusted is True
        assert clock.voucher() is Voucher.TIMESYNCD

    def test_the_kernel_vouches_where_there_is_no_timesyncd(self, tmp_path: Path) -> None:
        clock = SystemClock(timesyncd_flag=tmp_path / "absent", kernel=lambda: True)

        assert clock.voucher() is Voucher.KERNEL

    def test_a_battery_clock_vouches_only_when_the_configuration_says_so(self, tmp_path: Path) -> None:
        clock = SystemClock(timesyncd_flag=tmp_path / "absent", kernel=never, trust_rtc=True)

        assert clock.voucher() is Voucher.RTC

    def test_a_forbidden_kernel_read_is_tried_once_and_never_vouches(self, tmp_path: Path) -> None:
        asked: list[None] = []
        clock = SystemClock(timesyncd_flag=tmp_path / "absent", kernel=lambda: asked.append(None), recheck_s=0)

        assert [clock.now().trusted for _ in range(5)] == [False] * 5
        assert len(asked) == 1

    def test_evidence_is_taken_seldom_however_often_the_time_is_asked(self, tmp_path: Path) -> None:
        asked: list[None] = []

        def kernel() -> bool:
            asked.append(None)
            return True

        clock = SystemClock(timesyncd_flag=tmp_path / "absent", kernel=kernel, recheck_s=1e6)
        for _ in range(1000):
            clock.now()

        assert len(asked) == 1

    def test_a_first_sync_is_seen_once_the_answer_is_old(self, tmp_path: Path) -> None:
        flag = tmp_path / "synchronized"
        clock = SystemClock(timesyncd_flag=flag, kernel=never, recheck_s=0)
        before = clock.now().trusted
        flag.touch()

        assert (before, clock.now().trusted) == (False, True)

    def test_a_step_of_the_wall_clock_asks_for_the_evidence_again(self, tmp_path: Path) -> None:
        """`date -s` clears the kernel's status: the remembered answer was for another time."""
        times = {"ahead": 0.0}
        synchronised = {"now": True}
        clock = SystemClock(
            timesyncd_flag=tmp_path / "absent",
            kernel=lambda: synchronised["now"],
            wall=lambda: clock_s() + times["ahead"],
            recheck_s=1e6,
        )
        assert clock.now().trusted is True

        times["ahead"] = 3 * 365 * 86400.0
        synchronised["now"] = False

        assert clock.now().trusted is False

    def test_a_sync_in_the_middle_of_a_reading_never_vouches_for_the_time_before_it(self, tmp_path: Path) -> None:
        """The time service sets clock and flag between any two reads of ours; whoever is trusted must be right."""
        right, wrong = 1_800_000_000.0, 1_700_000_000.0
        for moment in range(6):
            synced = Event()
            flag = tmp_path / f"flag{moment}"
            countdown = iter(range(100))

            def touch(flag: Path = flag, synced: Event = synced) -> None:
                synced.set()
                flag.touch()

            def wall(moment: int = moment, synced: Event = synced, countdown=countdown, touch=touch) -> float:
                read = right if synced.is_set() else wrong
                if next(countdown) == moment:
                    touch()
                return read + clock_s() % 0.001

            clock = SystemClock(timesyncd_flag=flag, kernel=never, wall=wall, recheck_s=0)
            instants = [clock.now() for _ in range(5)]

            assert all(abs(instant.utc - right) < 1 for instant in instants if instant.trusted)
            assert instants[-1].trusted

    def test_the_kernel_status_agrees_with_a_second_reading_of_the_raw_bytes(self) -> None:
        """`struct timex`, adjtimex(2): an unsigned, four longs, then the status; STA_UNSYNC is 0x40, TIME_ERROR 5."""
        raw = ctypes.create_string_buffer(512)
        state = ctypes.CDLL(None).ntp_adjtime(raw)
        status = struct.unpack_from("@I4li", raw.raw)[-1]

        assert kernel_synchronised() == (None if state < 0 else state != 5 and not status & 0x40)


def clock_s() -> float:
    return SystemClock(kernel=never).now().boot_s


class TestBootId:
    @pytest.mark.parametrize(
        "text", [KERNEL_SPELLING, SYSTEMD_SPELLING, KERNEL_SPELLING.upper(), f"  {KERNEL_SPELLING}\n"]
    )
    def test_all_spellings_of_one_boot_are_one_name(self, text: str) -> None:
        assert normalised_boot_id(text) == SYSTEMD_SPELLING

    @pytest.mark.parametrize("text", ["", "%b", "0" * 32, "1f0c", SYSTEMD_SPELLING + "0", "g" * 32])
    def test_what_is_no_boot_id_is_refused(self, text: str) -> None:
        assert normalised_boot_id(text) is None

    def test_the_environment_comes_first(self, tmp_path: Path) -> None:
        file = tmp_path / "boot_id"
        file.write_text("f" * 32)

        assert read_boot_id({"MOTEKEEP_BOOT_ID": SYSTEMD_SPELLING}, file) == SYSTEMD_SPELLING

    def test_without_the_environment_the_kernel_is_asked(self, tmp_path: Path) -> None:
        file = tmp_path / "boot_id"
        file.write_text(KERNEL_SPELLING + "\n")

        assert read_boot_id({"MOTEKEEP_BOOT_ID": "nonsense"}, file) == SYSTEMD_SPELLING

    def test_without_either_each_process_counts_as_a_boot_of_its_own(self, tmp_path: Path) -> None:
        first, second = (read_boot_id({}, tmp_path / "absent") for _ in range(2))

        assert first != second
        assert normalised_boot_id(first) == first

    def test_this_machine_agrees_with_its_kernel(self) -> None:
        file = Path("/proc/sys/kernel/random/boot_id")
        expected = normalised_boot_id(os.environ.get("MOTEKEEP_BOOT_ID", "")) or normalised_boot_id(file.read_text())

        assert SystemClock().now().boot_id == expected


class TestSimulation:
    def test_a_wait_passes_a_day_and_plans_happen_in_order_at_their_moment(self) -> None:
        clock = FakeClock(boot_s=0)
        seen: list[tuple[str, float]] = []
        clock.after(7200, lambda: seen.append(("late", clock.now().boot_s)))
        clock.after(60, lambda: seen.append(("early", clock.now().boot_s)))

        assert clock.wait(Event(), 86400) is False

        assert seen == [("early", 60), ("late", 7200)]
        assert clock.now().boot_s == 86400

    def test_an_event_set_by_a_plan_ends_the_wait_at_that_moment(self) -> None:
        clock = FakeClock(boot_s=0)
        stop = Event()
        clock.after(42, stop.set)

        assert clock.wait(stop, 3600) is True
        assert clock.now().boot_s == 42

    def test_a_step_moves_the_wall_clock_and_no_duration(self) -> None:
        clock = FakeClock()
        before = clock.now()

        clock.step(-3600)

        assert clock.now().boot_s == before.boot_s
        assert clock.now().offset - before.offset == -3600

    def test_a_sync_sets_the_time_and_the_trust_together(self) -> None:
        clock = FakeClock(utc=1e9, trusted=False)
        clock.sync(1.8e9)

        assert (clock.now().utc, clock.now().trusted) == (1.8e9, True)

    def test_a_reboot_has_a_new_name_and_starts_its_own_count(self) -> None:
        clock = FakeClock(boot_s=5000)
        clock.after(10, lambda: pytest.fail("a plan outlived its boot"))
        before = clock.now()

        clock.reboot(off_s=600, wakes_at=before.utc - 86400)
        clock.advance(100)

        after = clock.now()
        assert after.boot_id != before.boot_id
        assert (after.boot_s, after.trusted) == (100, False)
        assert after.utc == before.utc - 86400 + 100

    def test_a_driven_clock_holds_two_loops_to_one_time(self) -> None:
        clock = FakeClock(boot_s=0, driven=True)
        ends: dict[float, float] = {}

        def loop(seconds: float) -> None:
            clock.wait(Event(), seconds)
            ends[seconds] = clock.now().boot_s

        loops = [threading.Thread(target=loop, args=(seconds,)) for seconds in (10.0, 25.0)]
        for thread in loops:
            thread.start()
        clock.settle(2)
        clock.advance(10)
        loops[0].join(5)
        clock.advance(15)
        loops[1].join(5)

        assert ends == {10.0: 10.0, 25.0: 25.0}

    def test_boot_time_cannot_be_turned_back(self) -> None:
        with pytest.raises(ValueError, match="never runs backwards"):
            FakeClock().advance(-1)
