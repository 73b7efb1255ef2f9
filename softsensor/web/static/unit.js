"use strict";
// A unit's page: numbers and parts that renew themselves as the program tells what happens.

(() => {
  const PART_EVERY = 1000;
  const ALL_EVERY = 30000;
  const SILENCE = 25000;
  const AGAIN = 2000;
  const PARTS_OF = {
    flag: ["flags", "sensors", "events", "trail"],
    lab: ["laboratory", "events", "trail"],
    event: ["state", "events"],
    connection: ["state", "events"],
  };
  const ALL = ["state", "sensors", "flags", "laboratory", "events", "trail"];

  let root, address, charts, sensorChart = null, openSensor = null;
  let stream = null, heard = 0, hours = 8, drawn = 0, whole = 0;
  const due = new Set();
  const busy = new Set();

  // Makes one tree of nodes like another, touching only what differs, so that focus and open parts stay.
  function liken(present, wanted) {
    const olds = Array.from(present.childNodes), news = Array.from(wanted.childNodes);
    news.forEach((child, i) => {
      const old = olds[i];
      if (old === undefined) { present.append(document.importNode(child, true)); return; }
      if (old.nodeType !== child.nodeType || old.nodeName !== child.nodeName) {
        old.replaceWith(document.importNode(child, true));
        return;
      }
      if (child.nodeType === Node.TEXT_NODE) {
        if (old.data !== child.data) old.data = child.data;
        return;
      }
      if (child.nodeType !== Node.ELEMENT_NODE) return;
      likenAttributes(old, child);
      if (old.nodeName !== "TIME" || old.childElementCount) liken(old, child);
    });
    olds.slice(news.length).forEach((old) => old.remove());
  }

  function likenAttributes(old, child) {
    for (const { name, value } of Array.from(child.attributes)) {
      if (name === "aria-expanded") continue;
      if (old.getAttribute(name) !== value) old.setAttribute(name, value);
    }
    for (const { name } of Array.from(old.attributes)) {
      if (!child.hasAttribute(name) && !(old.nodeName === "TIME" && name === "title")) old.removeAttribute(name);
    }
  }

  async function renewPart(name) {
    if (busy.has(name)) return;
    busy.add(name);
    try {
      const answer = await fetch(address + "/part/" + name);
      if (!answer.ok) throw new Error("the program answered with " + answer.status);
      const text = await answer.text();
      const wanted = new DOMParser().parseFromString("<!DOCTYPE html><body>" + text, "text/html").body;
      const present = document.getElementById("part-" + name);
      liken(present, wanted);
      Times.showAll(present);
      if (name === "sensors") markOpenSensor();
    } catch (fault) {
      due.add(name);
    } finally {
      busy.delete(name);
    }
  }

  function renewDue() {
    if (document.hidden) return;
    const names = Array.from(due);
    due.clear();
    names.forEach(renewPart);
    const now = Date.now();
    if (now - drawn > chartsEvery()) renewCharts();
    if (now - whole > ALL_EVERY) {
      whole = now;
      ALL.forEach((part) => due.add(part));
    }
    if (stream !== null && now - heard > SILENCE) restart("The program has been silent for a while.");
  }

  // Long stretches take the program seconds to read, and change little.
  function chartsEvery() { return Math.max(30000, 4000 * hours); }

  function renewCharts() {
    drawn = Date.now();
    charts.forEach((chart) => chart.renew());
    if (sensorChart !== null) sensorChart.renew();
  }

  function put(element, text) { if (element.textContent !== text) element.textContent = text; }

  function showNumber(element, value) {
    const shown = value === null || value === undefined ? "none" : value.toFixed(Number(element.dataset.decimals));
    put(element, shown);
  }

  function showEstimate(place, now) {
    for (const field of ["value", "lower", "upper"]) {
      showNumber(place.querySelector('[data-field="' + field + '"]'), now[field]);
    }
    put(place.querySelector('[data-field="status"]'), now.status);
    put(place.querySelector('[data-field="reason"]'), now.reason);
    const quality = place.querySelector('[data-field="quality"]');
    const wanted = "quality quality-" + now.status.toLowerCase();
    if (quality.className !== wanted) quality.className = wanted;
  }

  function showCycle(cycle, skipped) {
    const place = document.getElementById("cycle-time");
    let time = place.querySelector("time");
    if (time === null) {
      time = document.createElement("time");
      time.className = "both";
      place.replaceChildren(time);
    }
    time.dateTime = new Date(cycle.time / 1000).toISOString();
    Times.show(time);
    charts.forEach((chart, i) => {
      const now = cycle.estimates[chart.tag];
      if (now === undefined) return;
      showEstimate(document.getElementById("part-estimates-" + i), now);
      chart.append(cycle.time, cycle.cycle, skipped, now);
    });
    due.add("sensors");
  }

  function say(news) {
    const said = news.filter((item) => item.topic === "flag" || item.topic === "connection").map((item) => {
      if (item.topic === "connection") return "Plant " + item.body.state + ".";
      const ended = item.body.cleared !== null && item.body.cleared !== undefined;
      return "Flag on " + item.body.tag + ", " + item.body.kind + (ended ? ", cleared." : ", opened.");
    });
    if (said.length) document.getElementById("said").textContent = said.join(" ");
  }

  function update(message) {
    const body = JSON.parse(message.data);
    heard = Date.now();
    if (body.cycle !== null) showCycle(body.cycle, body.skipped);
    const topics = Object.keys(body.topics);
    topics.forEach((topic) => (PARTS_OF[topic] || []).forEach((part) => due.add(part)));
    if (topics.includes("flag") || topics.includes("lab")) setTimeout(renewCharts, PART_EVERY);
    if (topics.length) setTimeout(() => topics.forEach((t) => (PARTS_OF[t] || []).forEach((p) => due.add(p))), 3000);
    say(body.news);
  }

  function tell(text) {
    const place = document.getElementById("stream");
    put(place, text);
    place.hidden = text === "";
  }

  function listen() {
    stream = new EventSource(address + "/live");
    stream.addEventListener("alive", () => {
      heard = Date.now();
      root.dataset.live = "yes";
      if (!document.getElementById("stream").hidden) {
        tell("");
        ALL.forEach((part) => due.add(part));
        renewCharts();
      }
    });
    stream.addEventListener("update", update);
    stream.addEventListener("error", () => {
      root.dataset.live = "no";
      tell("The page has lost its connection to the program and tries again. What is shown may be old.");
      if (stream !== null && stream.readyState === EventSource.CLOSED) restart("");
    });
  }

  function restart(why) {
    if (why) tell(why + " The page tries again. What is shown may be old.");
    if (stream !== null) stream.close();
    stream = null;
    heard = Date.now();
    setTimeout(listen, AGAIN);
  }

  function choosePeriod(button) {
    hours = Number(button.dataset.hours);
    root.querySelectorAll("[data-hours]").forEach((each) => {
      each.setAttribute("aria-pressed", String(each === button));
    });
    charts.forEach((chart) => { chart.followed = null; chart.draw(hours); });
    if (sensorChart !== null) { sensorChart.followed = null; sensorChart.draw(hours); }
  }

  function markOpenSensor() {
    root.querySelectorAll("[data-sensor]").forEach((button) => {
      button.setAttribute("aria-expanded", String(button.dataset.sensor === openSensor));
    });
  }

  function openSensorChart(tag) {
    const panel = document.getElementById("sensor-chart");
    openSensor = tag === openSensor ? null : tag;
    panel.hidden = openSensor === null;
    const place = panel.querySelector(".chart");
    if (sensorChart !== null) sensorChart.abandon();
    sensorChart = null;
    markOpenSensor();
    if (openSensor === null) return;
    const heading = document.getElementById("sensor-chart-heading");
    heading.textContent = tag + ": reading against prediction, cumulative sums";
    sensorChart = new Chart(place, address, tag);
    sensorChart.draw(hours);
    panel.scrollIntoView({ block: "nearest" });
  }

  function clicked(event) {
    const button = event.target.closest("button");
    if (button === null) return;
    if (button.dataset.hours) choosePeriod(button);
    else if (button.dataset.sensor) openSensorChart(button.dataset.sensor);
    else if (button.id === "sensor-chart-close") {
      const opener = root.querySelector('[data-sensor="' + CSS.escape(openSensor) + '"]');
      openSensorChart(openSensor);
      if (opener !== null) opener.focus();
    }
  }

  document.addEventListener("DOMContentLoaded", () => {
    root = document.getElementById("unit");
    address = root.dataset.address;
    charts = Array.from(root.querySelectorAll(".estimate .chart")).map((e) => new Chart(e, address, e.dataset.tag));
    root.addEventListener("click", clicked);
    drawn = heard = whole = Date.now();
    charts.forEach((chart) => chart.draw(hours));
    listen();
    setInterval(renewDue, PART_EVERY);
    setInterval(() => due.add("state"), 10000);
  });
})();
