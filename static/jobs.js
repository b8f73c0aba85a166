// One computation seen from this tab: asked for, followed, held by a lease, left.

import { ask, askJson, handshake, post, withQuery } from "./net.js";

const PICTURE_PAUSE = 250; // at most four pictures a second
const FIRST_PATIENCE = 0.4; // seconds
const WATCHDOG = 40_000; // the server sends a heartbeat every 15 s
const POLL = 1_000;
const FIRST_RETRY = 500;
const LONGEST_RETRY = 15_000;
const STREAM_FAILURES = 3; // after these, ask instead of listening

const ACTIVE = new Set(["queued", "running"]);

export class Watch {
  // calls: picture(data), progress(facts), ended(facts), failed(problem)
  constructor(boot, calls) {
    this.boot = boot;
    this.calls = calls;
    this.run = null;
    document.addEventListener("visibilitychange", () => this.visibility());
    window.addEventListener("pagehide", () => this.leave());
    window.addEventListener("pageshow", (event) => {
      if (event.persisted && this.query !== undefined) this.begin(this.link, this.query);
    });
  }

  get active() {
    return this.run !== null && ACTIVE.has(this.run.facts?.state);
  }

  async begin(link, query) {
    this.leave();
    const run = this.enter(link, query);
    try {
      // the first points are there before a stream could be: the answer waits for them
      const answer = await post(`api/jobs?first=${FIRST_PATIENCE}`, { link });
      if (run.alive) await this.hold(run, answer);
      else this.drop(answer.id, answer.lease);
    } catch (problem) {
      if (run.alive) this.calls.failed(problem);
    }
  }

  // What a form asks, in one round trip; what is shown now stays held until the answer is there.
  ask(fields) {
    const run = this.active ? this.run : null;
    return post(`api/jobs?first=${FIRST_PATIENCE}`, { form: fields, ...(run && { instead: { id: run.id, lease: run.lease } }) });
  }

  // Follow what `ask` brought, in the place of what was followed before.
  async follow(link, query, answer) {
    if (this.run?.alive) this.finish(this.run);
    const run = this.enter(link, query);
    try {
      await this.hold(run, answer);
    } catch (problem) {
      if (run.alive) this.calls.failed(problem);
    }
  }

  // The view changed, the computation did not: same job, new picture.
  redraw(query) {
    const run = this.run;
    if (!run?.id) return;
    run.query = query;
    this.query = query;
    run.drawn = -1;
    this.picture(run);
  }

  enter(link, query) {
    this.link = link;
    this.query = query;
    this.run = { query, alive: true, failures: 0, revision: -1, drawn: -1, lastPicture: 0 };
    return this.run;
  }

  async hold(run, { picture, address, ...facts }) {
    Object.assign(run, { id: facts.id, lease: facts.lease, pause: facts.lease_seconds * 333 });
    run.pulse = setInterval(() => this.heartbeat(run), run.pause);
    if (picture) {
      run.revision = picture.revision;
      run.drawn = picture.revision;
      run.lastPicture = performance.now();
      await this.calls.picture(picture);
    }
    this.take(run, facts);
    if (run.alive && ACTIVE.has(facts.state)) this.listen(run);
  }

  // -- news ---------------------------------------------------------------------------------------

  take(run, facts) {
    if (!run.alive) return;
    run.facts = facts;
    this.calls.progress(facts);
    if (facts.error) {
      this.finish(run);
      this.calls.failed({ facts: facts.error });
      return;
    }
    if (facts.done > 0 && facts.revision > run.revision) {
      run.revision = facts.revision;
      this.picture(run);
    }
    if (!ACTIVE.has(facts.state)) this.end(run, facts);
  }

  end(run, facts) {
    this.finish(run);
    this.calls.ended(facts);
    if (facts.state === "restarting") setTimeout(() => run.alive && this.again(run), 1500 + Math.random() * 2000);
  }

  async again(run) {
    if (await handshake(this.boot)) this.begin(this.link, run.query);
  }

  listen(run) {
    if (!run.alive || document.hidden) return;
    if (run.failures >= STREAM_FAILURES) {
      this.poll(run);
      return;
    }
    const source = new EventSource(`api/jobs/${run.id}/events`);
    run.source = source;
    const heard = () => {
      clearTimeout(run.watchdog);
      run.watchdog = setTimeout(() => this.retry(run), WATCHDOG);
    };
    heard();
    for (const name of ["snapshot", "progress", "end"]) {
      source.addEventListener(name, (event) => {
        heard();
        run.failures = 0;
        this.take(run, JSON.parse(event.data));
      });
    }
    source.addEventListener("heartbeat", heard);
    source.addEventListener("error", () => this.retry(run));
  }

  async retry(run) {
    if (!run.alive || !run.source) return;
    this.silence(run);
    run.failures += 1;
    const wait = Math.min(LONGEST_RETRY, FIRST_RETRY * 2 ** run.failures) * (0.5 + Math.random());
    run.timer = setTimeout(async () => {
      if (!(await handshake(this.boot))) return;
      this.resync(run);
    }, wait);
  }

  // Ask where the job stands, then listen again; a job the server has forgotten is asked for anew.
  async resync(run) {
    if (!run.alive || !run.id) return;
    try {
      const facts = await askJson(`api/jobs/${run.id}`);
      this.take(run, facts);
      if (run.alive && ACTIVE.has(facts.state)) this.listen(run);
    } catch (problem) {
      if (!run.alive) return;
      if (problem.status === 404) this.begin(this.link, run.query);
      else {
        run.failures += 1;
        run.timer = setTimeout(() => this.resync(run), Math.min(LONGEST_RETRY, POLL * run.failures) * (0.5 + Math.random()));
      }
    }
  }

  poll(run) {
    run.timer = setTimeout(async () => {
      if (!run.alive || document.hidden) return;
      await this.resync(run);
    }, POLL * (0.75 + Math.random() / 2));
  }

  visibility() {
    const run = this.run;
    if (!run?.alive || !run.id || !ACTIVE.has(run.facts?.state)) return;
    if (document.hidden) {
      this.silence(run);
      clearTimeout(run.timer);
    } else this.resync(run);
  }

  async heartbeat(run) {
    if (!run.alive) return;
    try {
      await ask(`api/jobs/${run.id}/leases/${run.lease}`, { method: "POST" });
    } catch (problem) {
      if (run.alive && problem.status === 404 && ACTIVE.has(run.facts?.state)) this.begin(this.link, run.query);
    }
  }

  // -- pictures -----------------------------------------------------------------------------------

  async picture(run) {
    if (run.drawing) {
      run.again = true;
      return;
    }
    const wait = ACTIVE.has(run.facts?.state) ? run.lastPicture + PICTURE_PAUSE - performance.now() : 0;
    if (wait > 0) {
      if (!run.waiting) {
        run.waiting = setTimeout(() => {
          run.waiting = null;
          this.picture(run);
        }, wait);
      }
      return;
    }
    clearTimeout(run.waiting);
    run.waiting = null;
    run.drawing = true;
    run.lastPicture = performance.now();
    const query = run.query;
    try {
      const data = await askJson(withQuery(`api/jobs/${run.id}/picture`, query));
      if (this.run === run && run.query === query) {
        run.drawn = data.revision;
        await this.calls.picture(data);
      }
    } catch (problem) {
      if (this.run === run && problem.status !== 503) this.calls.failed(problem);
    } finally {
      run.drawing = false;
      if (run.again || run.query !== query) {
        run.again = false;
        this.picture(run);
      }
    }
  }

  // -- leaving ------------------------------------------------------------------------------------

  silence(run) {
    clearTimeout(run.watchdog);
    run.source?.close();
    run.source = null;
  }

  finish(run) {
    this.silence(run);
    clearTimeout(run.timer);
    clearInterval(run.pulse);
    run.alive = false;
  }

  leave() {
    const run = this.run;
    if (!run?.alive) return;
    this.finish(run);
    if (run.id && ACTIVE.has(run.facts?.state)) this.drop(run.id, run.lease);
  }

  drop(id, lease) {
    fetch(`api/jobs/${id}?lease=${lease}`, { method: "DELETE", keepalive: true }).catch(() => {});
  }

  async cancel() {
    const run = this.run;
    if (!run?.alive || !run.id) return;
    this.finish(run);
    try {
      const facts = await askJson(`api/jobs/${run.id}?lease=${run.lease}`, { method: "DELETE" });
      this.calls.ended({ ...facts, state: "cancelled" });
    } catch (problem) {
      this.calls.failed(problem);
    }
  }
}

// A coarse picture while a knob is being dragged; null when the server is not quick enough.
export async function glimpse(link, query, patience) {
  const until = performance.now() + patience;
  const facts = await post("api/jobs", { link });
  try {
    for (;;) {
      const now = await askJson(`api/jobs/${facts.id}`);
      if (now.state === "done") return await askJson(withQuery(`api/jobs/${facts.id}/picture`, query));
      if (!ACTIVE.has(now.state) || performance.now() > until) return null;
      await new Promise((resolve) => setTimeout(resolve, 30));
    }
  } finally {
    fetch(`api/jobs/${facts.id}?lease=${facts.lease}`, { method: "DELETE" }).catch(() => {});
  }
}
