"""The command line: `softmode`, `softmode compute`, `softmode limits`."""

import argparse
import os
import sys
from collections.abc import Sequence
from pathlib import Path

from app import __version__, calibration, exports, kinds, limits, links
from app.errors import SoftmodeError
from app.map_sheets import MapSheet
from app.offline import compute_sheet, measure_machine
from app.plan import check_price
from app.settings import MEBIBYTE, Settings, processors

FAILED = 1
MISUSED = 2
BAR = 30
CLUSTER_HELP = "compute on a Dask cluster: tcp://HOST:PORT of a scheduler here, tls://HOST:PORT elsewhere"


def parser() -> argparse.ArgumentParser:
    """Return the parser of the command line."""
    top = argparse.ArgumentParser(
        prog="softmode",
        description="Start the server, or compute a link without one.",
    )
    top.add_argument("--version", action="version", version=f"softmode {__version__}")
    _server_options(top)
    commands = top.add_subparsers(dest="command", metavar="command")
    compute = commands.add_parser("compute", help="compute a link without a server")
    compute.add_argument("link", help="a link as in the address bar, in quotes")
    compute.add_argument(
        "--out", type=Path, required=True, help="file to write, ending in .csv, .json or (maps) .npz"
    )
    compute.add_argument("--workers", type=int, default=processors(), help="computing processes")
    compute.add_argument("--cluster", metavar="ADDRESS", dest="compute_cluster", help=CLUSTER_HELP)
    commands.add_parser("limits", help="print what this machine can take")
    return top


def _server_options(top: argparse.ArgumentParser) -> None:
    known = Settings()
    top.add_argument("--host", default=known.host, help="address to listen on (default %(default)s)")
    top.add_argument("--port", type=int, default=known.port, help="port, 0 for any (default %(default)s)")
    top.add_argument(
        "--data", type=Path, default=known.data, help="directory of the results (default %(default)s)"
    )
    top.add_argument(
        "--workers", type=int, default=known.workers, help="computing processes (default %(default)s)"
    )
    top.add_argument("--cluster", metavar="ADDRESS", help=CLUSTER_HELP)
    top.add_argument(
        "--cluster-patience",
        type=float,
        default=known.cluster_patience,
        help="seconds that work waits for a lost scheduler (%(default)s)",
    )
    top.add_argument("--key", default=os.environ.get("SOFTMODE_KEY"), help="shared key (or set SOFTMODE_KEY)")
    top.add_argument("--open", action="store_true", help="let everybody who reaches the address compute")
    top.add_argument(
        "--prefix", default="", help="path below which a proxy shows the server, such as /softmode"
    )
    top.add_argument(
        "--allow-host",
        action="append",
        default=[],
        metavar="NAME",
        help="further name of this server; repeatable",
    )
    top.add_argument(
        "--ceiling",
        type=float,
        default=known.price_ceiling,
        help="most processor seconds of a sheet (%(default)s)",
    )
    top.add_argument(
        "--store-size",
        type=int,
        default=known.store_bytes // MEBIBYTE,
        help="MiB of results to keep (%(default)s)",
    )
    top.add_argument(
        "--queue", type=int, default=known.queue_limit, help="most unfinished sheets at a time (%(default)s)"
    )
    top.add_argument(
        "--lease",
        type=float,
        default=known.lease_seconds,
        help="seconds a silent viewer is kept (%(default)s)",
    )
    top.add_argument(
        "--grace", type=float, default=known.grace_seconds, help="seconds beyond the lease (%(default)s)"
    )
    top.add_argument("--no-browser", action="store_true", help="do not open a browser")


def run(arguments: Sequence[str]) -> int:
    """Run a command line and return its exit status."""
    chosen = parser().parse_args(arguments)
    try:
        if chosen.command == "compute":
            return _compute(chosen.link, chosen.out, chosen.workers, chosen.compute_cluster or chosen.cluster)
        if chosen.command == "limits":
            return _limits(chosen.data)
        return _serve(chosen)
    except SoftmodeError as error:
        print(f"softmode: {error.message}", file=sys.stderr)
        if error.allowed is not None:
            print(f"  {error.field}: {error.value!r}; allowed: {error.allowed}", file=sys.stderr)
        return MISUSED
    except KeyboardInterrupt:
        print("softmode: stopped", file=sys.stderr)
        return FAILED


def _serve(chosen: argparse.Namespace) -> int:
    # computing a link needs no web server
    from app.server import serve  # noqa: PLC0415

    settings = Settings(
        host=chosen.host,
        port=chosen.port,
        data=chosen.data,
        workers=chosen.workers,
        cluster=chosen.cluster,
        cluster_patience=chosen.cluster_patience,
        key=chosen.key or None,
        open_to_all=chosen.open,
        prefix=chosen.prefix,
        allowed_hosts=tuple(chosen.allow_host),
        price_ceiling=chosen.ceiling,
        store_bytes=chosen.store_size * MEBIBYTE,
        queue_limit=chosen.queue,
        lease_seconds=chosen.lease,
        grace_seconds=chosen.grace,
    )
    browser = not chosen.no_browser and bool(os.environ.get("DISPLAY") or sys.platform == "darwin")
    return serve(settings, browser=browser)


def _compute(link: str, out: Path, workers: int, cluster: str | None) -> int:
    if out.suffix not in {".csv", ".json", ".npz"}:
        print(f"softmode: {out} must end in .csv, .json or .npz", file=sys.stderr)
        return MISUSED
    if workers < 1:
        print("softmode: --workers must be at least 1", file=sys.stderr)
        return MISUSED
    if not out.parent.is_dir():
        print(f"softmode: there is no directory {out.parent}", file=sys.stderr)
        return MISUSED
    sheet = links.parse_link(link)
    if out.suffix == ".npz" and not isinstance(sheet, MapSheet):
        print("softmode: only maps are written as .npz; choose .csv or .json", file=sys.stderr)
        return MISUSED
    check_price(kinds.plan_of(sheet), float("inf"), Settings().memory_ceiling)
    result = compute_sheet(sheet, workers, _show_progress, cluster)
    sys.stderr.write("\n")
    if out.suffix == ".json":
        out.write_bytes(exports.encode(result))
    elif out.suffix == ".npz":
        out.write_bytes(kinds.npz_of(result))
    else:
        out.write_text(kinds.csv_of(result), encoding="utf-8", newline="")
    print(f"{out}: {sheet.total} points, {result['provenance']['seconds']:.2f} s of processor time")
    return 0


def _show_progress(done: int, total: int) -> None:
    """Draw the progress bar, on a terminal over itself, in a log only at the end."""
    if sys.stderr.isatty():
        filled = BAR * done // total
        sys.stderr.write(f"\r[{'#' * filled}{'.' * (BAR - filled)}] {done}/{total}")
    elif done == total:
        sys.stderr.write(f"{done}/{total}")
    sys.stderr.flush()


def _limits(data: Path) -> int:
    settings = Settings()
    found = calibration.load(data) or measure_machine(data)
    described = limits.describe(settings, found)
    print(f"{settings.workers} computing processes; up to {settings.memory_ceiling / 1e9:.3g} GB for a point")
    print(f"default ceiling of a sheet: {settings.price_ceiling:g} s of processor time")
    factors = ", ".join(f"{work} {factor:.2f}" for work, factor in sorted(found.factors.items()))
    print(f"processor: {found.processor}")
    print(f"measured {found.measured_at}, actual over forecast processor time: {factors}")
    print()
    print("isotropic, resonant, 6 levels, tol 1e-9; predicted for one point solved on its own:")
    print(f"{'spins':>6} {'coupling/critical':>18} {'seconds':>10} {'MB':>8} {'points in the ceiling':>22}")
    for price in described["point_prices"]:
        fitting = int(settings.price_ceiling / price["seconds"]) if price["seconds"] else 0
        print(
            f"{price['spins']:>6} {price['coupling_over_critical']:>18g} "
            f"{price['seconds']:>10.4f} {price['bytes'] / 1e6:>8.1f} {fitting:>22}"
        )
    return 0
