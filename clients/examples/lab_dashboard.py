"""Live data for a lab's dashboard: follows the newest test of a loop, as JSON lines or as one small page.

    python lab_dashboard.py TIC-201                 JSON lines on standard output, for any dashboard that reads a pipe
    python lab_dashboard.py TIC-201 --page 8080     a page on http://127.0.0.1:8080, which fetches nothing from outside

The token stays in this process: the page's browser needs none. A broken connection is resumed where it broke.
Exit status: 0 the test has ended; 1 the loop has no test; 3 the service refused or cannot be reached.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Iterator
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer

from gainwright_client import Client, ClientError
from gainwright_wire.tasks import Experiment, StreamProgress, StreamSample

PAGE = """<!doctype html><meta charset="utf-8"><title>{tag}</title>
<style>body{{font:16px system-ui;background:#10151c;color:#dde;margin:2em}}canvas{{width:100%;height:60vh}}
b{{color:#5cf}}</style>
<h1>{tag} <small id="phase"></small></h1><canvas id="plot"></canvas><p id="said"></p>
<script>
const samples = [], plot = document.getElementById("plot"), pen = plot.getContext("2d");
function draw() {{
  const w = plot.width = plot.clientWidth, h = plot.height = plot.clientHeight;
  const end = samples.at(-1).time_s, shown = samples.filter(s => s.time_s > end - 60);
  const signals = [["process_variable", "#5cf", 0, .7], ["commanded_output", "#fc5", .75, .25]];
  for (const [name, colour, top, part] of signals) {{
    const known = shown.filter(s => s[name] !== null), values = known.map(s => s[name]);
    const low = Math.min(...values), span = Math.max(...values) - low || 1;
    pen.strokeStyle = colour; pen.lineWidth = 2; pen.beginPath();
    for (const s of known) pen.lineTo(w * (1 - (end - s.time_s) / 60), h * (top + part * (1 - (s[name] - low) / span)));
    pen.stroke();
  }}
}}
const live = new EventSource("/stream");
live.addEventListener("sample", e => {{ samples.push(JSON.parse(e.data)); }});
live.addEventListener("progress", e => {{
  const p = JSON.parse(e.data), gain = p.provisional_ultimate_gain;
  document.getElementById("phase").textContent = p.phase;
  const so_far = gain ? `ultimate gain so far ${{gain.toPrecision(3)}}` : "";
  document.getElementById("said").textContent = `${{p.message}} ${{so_far}}`;
}});
live.addEventListener("end", e => {{
  const x = JSON.parse(e.data); live.close();
  document.getElementById("phase").textContent = `${{x.outcome}}, exit ${{x.exit}}, grade ${{x.grade}}`;
}});
setInterval(() => samples.length && draw(), 200);
</script>"""


def kind(told: StreamSample | StreamProgress | Experiment) -> str:
    """What is told, in one word."""
    return {StreamSample: "sample", StreamProgress: "progress", Experiment: "end"}[type(told)]


def lines(client: Client, id: str) -> Iterator[str]:
    """Everything that is told, as JSON lines."""
    for told in client.follow(id):
        yield f'{{"{kind(told)}":{told.model_dump_json()}}}\n'


def page_server(tag: str, id: str, port: int) -> ThreadingHTTPServer:
    """A server of the page and its events, on the loopback only."""

    class Handler(BaseHTTPRequestHandler):
        def do_GET(self) -> None:
            if self.path == "/":
                self.answer("text/html; charset=utf-8")
                self.wfile.write(PAGE.format(tag=tag).encode())
            elif self.path == "/stream":
                self.answer("text/event-stream")
                self.relay()
            else:
                self.send_error(404)

        def answer(self, kind: str) -> None:
            self.send_response(200)
            self.send_header("Content-Type", kind)
            self.send_header("Cache-Control", "no-store")
            self.end_headers()

        def relay(self) -> None:
            try:
                with Client() as client:
                    for told in client.follow(id):
                        self.wfile.write(f"event: {kind(told)}\ndata: {told.model_dump_json()}\n\n".encode())
            except (BrokenPipeError, ConnectionResetError):
                self.close_connection = True

    return ThreadingHTTPServer(("127.0.0.1", port), Handler)


def main() -> int:
    """The script; its exit status."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("tag", help="the loop whose newest test is followed")
    parser.add_argument(
        "--page", type=int, metavar="PORT", help="serve a page here in place of JSON lines; 0: any port"
    )
    options = parser.parse_args()
    try:
        with Client() as client:
            newest = client.experiment_page(options.tag, limit=1).items
            if not newest:
                sys.stderr.write(f"{options.tag} has no test yet\n")
                return 1
            if options.page is None:
                for line in lines(client, newest[0].id):
                    sys.stdout.write(line)
                    sys.stdout.flush()
                return 0
        with page_server(options.tag, newest[0].id, options.page) as server:
            print(f"http://127.0.0.1:{server.server_address[1]}", flush=True)
            server.serve_forever()
    except ClientError as error:
        sys.stderr.write(f"{error}\n")
        return 3
    except (KeyboardInterrupt, BrokenPipeError):
        return 0
    return 0


if __name__ == "__main__":
    sys.exit(main())
