"""`rtctl ask`: talk to a running controller. Stop and e-stop go through a mapped file and import nothing heavy."""

from typing import Any

import click

from rtctl.cli.result import NEGATIVE, Result, json_option

REQUESTS = ("start", "stop", "estop", "reset", "law", "status", "why")


@click.command()
@click.argument("request", type=click.Choice(REQUESTS))
@click.argument("law_name", metavar="[LAW]", required=False)
@click.option("--controller", metavar="NAME", help="Which controller; not needed when only one runs.")
@click.option("--release", is_flag=True, help="With stop: release torque at rest (category 1) instead of holding (2).")
@json_option
def ask(request: str, law_name: str | None, controller: str | None, release: bool) -> Result:
    """Ask a running controller to start, stop or reset, or how it is.

    estop latches until reset; reset moves nothing; start is asked apart.
    It does not replace the hardware emergency stop.

    \b
    Examples:
      rtctl ask start
      rtctl ask stop
      rtctl ask estop
      rtctl ask law computed_torque
      rtctl ask status --json
      rtctl ask why
    """
    from rtctl.loop.control import ask as ask_controller

    if (request == "law") != (law_name is not None):
        raise click.UsageError(
            "law needs the name of a law: rtctl ask law NAME." if request == "law" else f"{request} takes no name."
        )
    if release and request != "stop":
        raise click.UsageError("--release goes with stop only.")
    verb = "stop_release" if release else request
    reply = ask_controller(controller, verb, law=law_name) if law_name else ask_controller(controller, verb)
    data = {"verdict": "pass" if reply["ok"] else "refuse", **reply}
    if not reply["ok"]:
        return Result(data, f"{request}: not done. {reply.get('text', '')}".strip(), NEGATIVE)
    return Result(data, _text(request, reply))


def _text(request: str, reply: dict[str, Any]) -> str:
    if request == "status":
        return _status_text(reply["status"], reply["why_no_start"])
    if request == "why":
        return _why_text(reply["why"])
    return {
        "start": "started",
        "stop": "stop taken",
        "estop": "e-stop taken: latched until a reset",
        "reset": "reset asked; nothing starts by it",
        "law": f"law in force from the next start: {reply.get('law')}",
    }[request]


def _status_text(status: dict[str, Any], why_no_start: list[str]) -> str:
    timing, driver = status["timing"], status["driver"]
    kind = "simulated arm" if driver["simulated"] else "REAL ARM"
    brake = "brake closed" if driver["brake_closed"] else "brake open"
    lines = [
        f"controller  {status['name']}, {kind}, {brake}",
        f"mode        {status['mode']}, law {status['law']}, {status['t_s']:.2f} s into the motion",
        f"cause       {status['cause']}",
        f"link        state {1e-6 * status['age_ns']:.2f} ms old, torque to state {1e-6 * status['loop_delay_ns']:.2f} ms",
        f"timing      {timing['cycle_count']} cycles, late p50 {timing['late_p50_us']:.0f} us, p99 {timing['late_p99_us']:.0f} us, "
        f"max {timing['late_max_us']:.0f} us, {timing['skipped_count']} periods skipped",
    ]
    least = min(status["margins"], key=lambda name: status["margins"][name])
    lines.append(f"margin      least {status['margins'][least]:.2f} ({least}); 1 is far from the limit, 0 at it")
    if status["mode"] in ("off", "latched"):
        lines.append(f"no start    {' '.join(why_no_start)}")
    return "\n".join(lines)


def _why_text(why: dict[str, Any]) -> str:
    if why["code"] == 0:
        return "No stop by a fault since the last reset."
    likely = "\n".join(f"  - {reason}" for reason in why["likely"])
    return f"{why['sentence']}\nLikely, most likely first:\n{likely}\nNext: {why['next']}"
