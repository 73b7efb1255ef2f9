"use strict";
// One chart: fetched as a Bokeh document, filled from its columns, extended as cycles come.

class Chart {
  constructor(element, address, tag) {
    this.element = element;
    this.address = address;
    this.tag = tag;
    this.hours = 8;
    this.roots = null;
    this.wanted = 0;
    this.lastCycle = null;
    this.followed = null;
  }

  offset() { return Times.offsetMinutes(new Date()); }

  query() {
    const named = { tag: this.tag, hours: this.hours, offset: this.offset() };
    return new URLSearchParams(named).toString();
  }

  async draw(hours) {
    this.hours = hours;
    const order = ++this.wanted;
    try {
      const { item, window } = await fetchJson(this.address + "/chart.json?" + this.query());
      if (order !== this.wanted) return;
      this.dispose();
      const views = await Bokeh.embed.embed_item(item, this.element);
      this.roots = rootsOf(views);
      this.bandAgain();
      this.lastCycle = null;
      this.followed = null;
      this.follow(window.start, window.end);
      this.element.dataset.drawn = String(hours);
    } catch (fault) {
      if (order !== this.wanted) return;
      this.dispose();
      const line = document.createElement("p");
      line.className = "failed";
      line.textContent = "The chart cannot be drawn at the moment: " + fault.message;
      this.element.replaceChildren(line);
    }
  }

  // Bokeh keeps every document that it has drawn until it is told otherwise.
  dispose() {
    for (const root of this.roots || []) {
      const drawn = root.document;
      if (drawn === null) continue;
      drawn.clear();
      const place = Bokeh.documents.indexOf(drawn);
      if (place >= 0) Bokeh.documents.splice(place, 1);
    }
    this.roots = null;
    delete this.element.dataset.drawn;
    this.element.replaceChildren();
  }

  // The chart is not wanted any more, a drawing under way included.
  abandon() {
    this.wanted++;
    this.dispose();
  }

  async renew() {
    if (this.roots === null) return this.draw(this.hours);
    const order = this.wanted;
    try {
      const data = await fetchJson(this.address + "/chart-data.json?" + this.query());
      if (order === this.wanted && this.roots !== null) this.fill(data);
    } catch (fault) {
      console.info("chart not renewed: " + fault.message);
    }
    return undefined;
  }

  find(name) {
    for (const root of this.roots) {
      const found = root.document.get_model_by_name(name);
      if (found !== null && found !== undefined) return found;
    }
    return null;
  }

  fill(data) {
    for (const [name, columns] of Object.entries(data.columns)) {
      const source = this.find(name);
      if (source !== null) source.data = numbersOf(columns);
    }
    this.bandAgain();
    this.lastCycle = null;
    this.follow(data.window.start, data.window.end);
  }

  follow(start, end) {
    const range = this.find("time");
    if (range === null) return;
    if (this.followed !== null && (range.start !== this.followed.start || range.end !== this.followed.end)) return;
    const from = this.begin(start, end);
    range.setv({ start: from, end });
    this.followed = { start: from, end };
  }

  // Where there is less on record than the period asked for, the axis starts with it.
  begin(start, end) {
    const source = this.find("estimate") || this.find("predicted");
    const first = source !== null && source.data.x.length ? source.data.x[0] : start;
    return Math.max(start, Math.min(first, end - (end - start) / 8));
  }

  bandAgain() {
    const band = this.find("band");
    const estimate = this.find("estimate");
    if (band !== null && estimate !== null) band.data = bandOf(estimate.data);
  }

  append(timeUs, cycle, skipped, now) {
    if (this.roots === null) return;
    const source = this.find("estimate");
    if (source === null) return;
    const x = timeUs / 1000 + this.offset() * 60000;
    const data = source.data;
    const last = data.x.length ? data.x[data.x.length - 1] : -Infinity;
    if (!(Number.isNaN(last) || x > last)) return;
    const row = { x: [x], value: [nan(now.value)], lower: [nan(now.lower)], upper: [nan(now.upper)] };
    const broken = this.lastCycle !== null && cycle - this.lastCycle > skipped + 1;
    if (broken) for (const key of Object.keys(row)) row[key].unshift(NaN);
    this.lastCycle = cycle;
    source.stream(row, 4000);
    this.bandAgain();
    const width = this.hours * 3600000;
    if (this.followed !== null && x > this.followed.end - 0.01 * width) this.follow(x - width, x + 0.02 * width);
  }
}

function nan(value) { return value === null || value === undefined ? NaN : value; }

function numbersOf(columns) {
  const out = {};
  for (const [name, values] of Object.entries(columns)) {
    out[name] = values.map((value) => (value === null ? NaN : value));
  }
  return out;
}

// A polygon for each stretch without a gap: along the upper edge and back along the lower one.
function bandOf(data) {
  const xs = [], ys = [];
  let start = 0;
  const close = (end) => {
    if (end - start > 1) {
      const x = Array.from(data.x.slice(start, end));
      const upper = Array.from(data.upper.slice(start, end));
      const lower = Array.from(data.lower.slice(start, end));
      xs.push(x.concat(x.slice().reverse()));
      ys.push(upper.concat(lower.reverse()));
    }
  };
  for (let i = 0; i < data.x.length; i++) {
    if (Number.isNaN(data.x[i]) || Number.isNaN(data.lower[i])) { close(i); start = i + 1; }
  }
  close(data.x.length);
  return { xs, ys };
}

function rootsOf(views) {
  const found = Array.isArray(views) ? views : views.roots ? Array.from(views.roots) : Array.from(views);
  return found.map((view) => view.model);
}

async function fetchJson(address) {
  const answer = await fetch(address, { headers: { Accept: "application/json" } });
  if (!answer.ok) throw new Error("the program answered with " + answer.status);
  return answer.json();
}
