"use strict";
// Times as the reader's clock shows them, with the offset from UTC; the UTC time stays in the title.

const Times = (() => {
  const two = (number) => String(number).padStart(2, "0");

  const offsetMinutes = (moment) => -moment.getTimezoneOffset();

  function offsetWords(minutes) {
    const size = Math.abs(minutes);
    return (minutes < 0 ? "-" : "+") + two(Math.floor(size / 60)) + ":" + two(size % 60);
  }

  const clock = (m) => two(m.getHours()) + ":" + two(m.getMinutes()) + ":" + two(m.getSeconds());
  const day = (m) => m.getFullYear() + "-" + two(m.getMonth() + 1) + "-" + two(m.getDate());
  const utcClock = (m) => m.toISOString().slice(11, 19);

  function words(moment) {
    return day(moment) + " " + clock(moment) + " " + offsetWords(offsetMinutes(moment));
  }

  function show(element) {
    const moment = new Date(element.dateTime);
    if (Number.isNaN(moment.getTime())) return;
    const both = element.classList.contains("both");
    const short = element.classList.contains("clock");
    const text = both ? words(moment) + " (" + utcClock(moment) + " UTC)" : short ? clock(moment) : words(moment);
    if (element.textContent !== text) element.textContent = text;
    element.title = moment.toISOString().replace("T", " ").replace(/\.\d+Z$/, " UTC");
  }

  const showAll = (root) => root.querySelectorAll("time[datetime]").forEach(show);

  document.addEventListener("DOMContentLoaded", () => showAll(document));
  return { show, showAll, offsetMinutes };
})();
