// The ranking's view: asks without leaving the page, draws, and points at one star everywhere at once.
"use strict";

const form = document.getElementById("ask");
const answer = document.getElementById("answer");
const part = (name) => document.getElementById(`part-${name}`);
const PLOTS = ["sky", "visibility", "night"];
const figures = {};        // name -> Bokeh's document of that plot
let data = null;           // what the plots show
let pointed = null;        // id of the star that the reader points at
let asking = null;         // the question under way, to be given up for a newer one

// ---- the question and its address

function question() {
  const values = new URLSearchParams();
  for (const [name, value] of new FormData(form)) {
    if (name !== "stations" && value.trim()) values.append(name, value.trim());
  }
  const boxes = [...form.querySelectorAll("[name=stations]")];
  const chosen = boxes.filter((box) => box.checked).map((box) => box.value);
  if (chosen.length && chosen.length < boxes.length) values.append("stations", chosen.join(","));
  return values;
}

async function ask({ push = true, renewForm = false, values = question() } = {}) {
  if (!values.get("target") && !renewForm) return;
  asking?.abort();
  const mine = new AbortController();
  asking = mine;
  answer.classList.add("busy");
  pinlight.busy("Ranking");
  try {
    const reply = await fetch(`${form.dataset.view}?${values}`, { signal: mine.signal });
    if (!reply.headers.get("content-type")?.startsWith("application/json")) throw new Error(`status ${reply.status}`);
    const found = await reply.json();
    if (!found.parts) throw new Error(found.detail || `status ${reply.status}`);
    if (push) history.pushState(null, "", `${location.pathname}?${values}`);
    show(found, renewForm);
  } catch (error) {
    if (error.name === "AbortError") return;
    answer.dataset.state = "problem";
    part("more").replaceChildren();
    const line = document.createElement("p");
    line.className = "problem";
    line.setAttribute("role", "alert");
    line.textContent = `The server gave no answer (${error.message}). `;
    const again = document.createElement("button");
    again.type = "button";
    again.textContent = "Ask again";
    again.addEventListener("click", () => ask({ push, renewForm, values }));
    line.append(again);
    part("head").replaceChildren(line);
  } finally {
    if (asking === mine) {
      asking = null;
      answer.classList.remove("busy");
      pinlight.busy("");
    }
  }
}

function show(found, renewForm) {
  for (const [name, html] of Object.entries(found.parts)) {
    if (name !== "form") part(name).innerHTML = html;
  }
  if (renewForm) {
    const focused = document.activeElement?.id;
    form.innerHTML = found.parts.form;
    if (focused) document.getElementById(focused)?.focus();
    suggestions();
  }
  document.title = found.title;
  answer.dataset.state = found.state;
  answer.classList.toggle("has-night", found.night);
  data = found.plots;
  pointed = null;
  fill();
  if (found.night && found.state === "ranking") looks();
}

form.addEventListener("submit", (event) => {
  event.preventDefault();
  ask();
});
form.addEventListener("change", (event) => {
  if (event.target.id === "target") return;  // told by Enter, the button or a suggestion
  if (event.target.id === "array") {  // other stations, other modes
    const values = question();
    values.delete("stations");
    values.delete("mode");
    ask({ renewForm: true, values });
  } else {
    ask();
  }
});
addEventListener("popstate", () => ask({ push: false, renewForm: true, values: new URLSearchParams(location.search) }));

// ---- names while typing

function suggestions() {
  const input = document.getElementById("target");
  const list = document.getElementById("suggestions");
  let timer = 0;
  let latest = 0;
  let index = -1;
  const close = () => {
    list.hidden = true;
    index = -1;
    input.setAttribute("aria-expanded", "false");
    input.removeAttribute("aria-activedescendant");
  };
  const mark = (wanted) => {
    const options = [...list.children];
    index = (wanted + options.length) % options.length;
    options.forEach((option, i) => option.setAttribute("aria-selected", String(i === index)));
    input.setAttribute("aria-activedescendant", options[index].id);
  };
  const take = (option) => {
    input.value = option.dataset.name;
    close();
    ask();
  };
  const offer = async () => {
    const mine = ++latest;
    const written = input.value.trim();
    if (written.length < 2) return close();
    let stars = [];
    try {
      stars = (await (await fetch(`${form.dataset.suggest}?q=${encodeURIComponent(written)}`)).json()).stars || [];
    } catch { /* no suggestions, then */ }
    if (mine !== latest || document.activeElement !== input) return undefined;
    list.replaceChildren(...stars.map((star, i) => {
      const option = document.createElement("li");
      option.id = `suggestion-${i}`;
      option.role = "option";
      option.ariaSelected = "false";
      option.dataset.name = star.name;
      const name = document.createElement("b");
      name.textContent = star.name;
      const type = document.createElement("span");
      type.textContent = [star.star === star.name ? "" : star.star, star.spectral_type].filter(Boolean).join(" · ");
      option.append(name, type);
      return option;
    }));
    if (!stars.length) return close();
    list.hidden = false;
    index = -1;
    input.removeAttribute("aria-activedescendant");
    return input.setAttribute("aria-expanded", "true");
  };
  input.addEventListener("input", () => {
    clearTimeout(timer);
    timer = setTimeout(offer, 80);
  });
  input.addEventListener("keydown", (event) => {
    if (event.key === "Escape") close();
    if (list.hidden) return;
    if (event.key === "ArrowDown" || event.key === "ArrowUp") {
      event.preventDefault();
      mark(event.key === "ArrowDown" ? index + 1 : Math.max(index, 0) - 1);
    } else if (event.key === "Enter") {
      if (index >= 0) {
        event.preventDefault();
        take(list.children[index]);
      } else {
        close();
      }
    }
  });
  input.addEventListener("blur", () => {
    latest += 1;
    close();
  });
  list.addEventListener("mousedown", (event) => {  // before the field loses the focus
    event.preventDefault();
    const option = event.target.closest("[role=option]");
    if (option) take(option);
  });
  input.form.addEventListener("submit", () => { latest += 1; close(); });
}

// ---- plots

const source = (plot, name) => figures[plot]?.get_model_by_name(name);

async function draw() {
  const scheme = pinlight.scheme;
  const items = await (await fetch(form.dataset.plots.replace("SCHEME", scheme))).json();
  for (const name of PLOTS) {
    const place = document.getElementById(`plot-${name}`);
    place.replaceChildren();
    const views = await Bokeh.embed.embed_item(items[name], place);
    const [view] = views.roots ?? Object.values(views);
    figures[name] = view.model.document;
    listen(name, view.model);
  }
  pinlight.root.classList.toggle("dark-plots", scheme === "dark");
  fill();
  pinlight.root.dataset.drawn = scheme;
}

function fill() {
  if (!data || !figures.night) return;
  for (const name of PLOTS) {
    const plot = figures[name].get_model_by_name(name);
    const [left, right, low, high] = data.ranges[name];
    plot.x_range.setv({ start: left, end: right });
    plot.y_range.setv({ start: low, end: high });
    for (const [key, columns] of Object.entries(data.sources)) {
      const found = source(name, key);
      if (found) found.data = columns;
    }
  }
  figures.visibility.get_model_by_name("floor").location = data.floor;
  const night = figures.night.get_model_by_name("night");
  night.height = 74 + 19 * data.rows.length;
  night.left[0].ticker.ticks = data.rows.map((_, i) => i);
  night.left[0].major_label_overrides = new Map(data.rows.map((name, i) => [i, name]));
  point(pointed);
}

async function looks() {
  const values = question();
  for (const name of [...values.keys()]) {
    if (!["target", "array", "mode", "stations", "night", "from", "to", "edition"].includes(name)) values.delete(name);
  }
  const shown = data;
  try {
    const reply = await fetch(`${form.dataset.looks}?${values}`);
    const { blocks } = await reply.json();
    if (!blocks?.length || data !== shown) return;
    const rows = { row: [], start: [], end: [] };
    for (const look of blocks[0].looks) {
      const row = look.role === "target" ? 0 : data.sources.stars.star_id.indexOf(look.star_id) + 1;
      if (look.role !== "target" && row === 0) continue;
      rows.row.push(row);
      rows.start.push(Date.parse(look.start_utc));
      rows.end.push(Date.parse(look.end_utc));
    }
    data.sources.looks = rows;
    const found = source("night", "looks");
    if (found) found.data = rows;
  } catch { /* the windows stand without them */ }
}

// ---- pointing

function point(id) {
  pointed = id;
  const stars = data?.sources.stars;
  const index = stars ? stars.star_id.indexOf(id) : -1;
  for (const row of part("list").querySelectorAll("tr[data-star]")) {
    row.classList.toggle("pointed", Number(row.dataset.star) === id);
  }
  const readout = document.getElementById("readout");
  readout.hidden = index < 0;
  if (index >= 0) {
    const row = part("list").querySelector(`tr[data-star="${id}"]`);
    const cell = (place) => row.cells[place]?.textContent.trim();
    const heading = part("list").querySelectorAll("thead th");
    readout.textContent = [
      cell(1), `${cell(2)} %`, `${cell(4)}° away`, cell(5), `${heading[6].textContent} ${cell(6)}`,
      `${cell(7)} mas`, `V² from ${cell(8)}`, row.cells[9] ? `${cell(9) || "never"} UTC` : "",
      row.querySelector("svg").getAttribute("aria-label"),
    ].filter(Boolean).join(" · ");
  }
  if (!figures.night || !stars) return;
  const one = (value) => (index < 0 ? [] : [value]);
  source("sky", "pointed_sky").data = {
    x: one(stars.east[index]), y: one(stars.north[index]), name: one(stars.name[index]),
  };
  const { curves, bands, windows } = data.sources;
  source("visibility", "pointed_visibility").data = {
    x: one(curves.baselines[index]), y: one(curves.v2[index]),
    band_x: one(bands.baselines[index]), band_y: one(bands.v2[index]),
  };
  const bars = windows.star_id.map((star, i) => i).filter((i) => index >= 0 && windows.star_id[i] === id);
  source("night", "pointed_night").data = {
    row: bars.map((i) => windows.row[i]), start: bars.map((i) => windows.start[i]), end: bars.map((i) => windows.end[i]),
  };
}

// The star nearest to a place in a plot, null where none is near.
const NEAREST = {
  sky({ x, y }) {
    const { stars } = data.sources;
    const reach = data.ranges.sky[0] / 12;
    return nearest(stars.star_id, (i) => Math.hypot(stars.east[i] - x, stars.north[i] - y), reach);
  },
  visibility({ x, y }) {
    const { curves } = data.sources;
    const [, right, low, high] = data.ranges.visibility;
    return nearest(curves.star_id, (i) => {
      const along = (x / right) * (curves.v2[i].length - 1);
      const before = Math.min(Math.max(Math.floor(along), 0), curves.v2[i].length - 2);
      const v2 = curves.v2[i][before] + (along - before) * (curves.v2[i][before + 1] - curves.v2[i][before]);
      return Math.abs(v2 - y);
    }, (high - low) / 12);
  },
  night({ y }) {
    return data.sources.stars.star_id[Math.round(y) - 1] ?? null;
  },
};

function nearest(ids, distance, reach) {
  let best = null;
  let least = reach;
  ids.forEach((id, i) => {
    const apart = distance(i);
    if (apart < least) [best, least] = [id, apart];
  });
  return best;
}

function listen(name, plot) {
  const at = (event) => {
    if (!data) return;
    const id = NEAREST[name](event);
    if (id !== pointed) point(id);
  };
  plot.on_event("mousemove", at);
  plot.on_event("tap", at);
}

part("list").addEventListener("mouseover", (event) => {
  const row = event.target.closest("tr[data-star]");
  if (row && Number(row.dataset.star) !== pointed) point(Number(row.dataset.star));
});
part("list").addEventListener("focusin", (event) => {
  const row = event.target.closest("tr[data-star]");
  if (row) point(Number(row.dataset.star));
});
part("list").addEventListener("click", (event) => {
  const row = event.target.closest("tr[data-star]");
  if (row && !event.target.closest("a")) point(Number(row.dataset.star));
});
// Up and down go from star to star, once one has the focus.
part("list").addEventListener("keydown", (event) => {
  const row = event.target.closest("tr[data-star]");
  const next = { ArrowDown: row?.nextElementSibling, ArrowUp: row?.previousElementSibling }[event.key];
  if (next) {
    event.preventDefault();
    next.querySelector("a").focus();
  }
});
document.addEventListener("keydown", (event) => {
  if (event.key === "Escape" && pointed !== null) point(null);
});

// ---- begin

const given = document.getElementById("plots");
if (given) data = JSON.parse(given.textContent);
suggestions();
draw().then(() => { if (data?.night) looks(); });
addEventListener("pinlight-scheme", draw);
