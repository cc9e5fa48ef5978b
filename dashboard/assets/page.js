/* What only the browser can know or do: colours of the theme, figures, local time, and whether the page still hears. */
"use strict";
(() => {
  const LOST_AFTER_MS = 10000;
  const root = document.documentElement;
  const look = () => ({ theme: root.dataset.theme, lost: document.body.classList.contains("lost"), at: Date.now() });
  const tell = (id, props) => window.dash_clientside?.set_props?.(id, props);
  const colour = (name) =>
    getComputedStyle(document.getElementById("page") ?? document.body).getPropertyValue(`--${name}`).trim();

  /* ---- theme and room ------------------------------------------------------------------------------------- */
  const system = matchMedia("(prefers-color-scheme: dark)");
  const stored = (key) => { try { return localStorage.getItem(key); } catch { return null; } };
  const store = (key, value) => { try { localStorage.setItem(key, value); } catch { /* a private window */ } };
  const applyTheme = () => {
    root.dataset.theme = stored("theme") ?? (system.matches ? "dark" : "light");
    tell("look", { data: look() });
  };
  system.addEventListener("change", applyTheme);

  const actions = {
    theme() { store("theme", root.dataset.theme === "dark" ? "light" : "dark"); applyTheme(); },
    "confirm-no"() { document.getElementById("confirm").close(); },
    "confirm-yes"(button) {
      document.getElementById("confirm").close();
      tell("asked", { data: { ...button.dataset, at: Date.now() } });
    },
    async "log-out"() { await fetch("/logout", { method: "POST" }); location.assign("/login"); },
    room(button) {
      const on = root.toggleAttribute("data-room");
      button.setAttribute("aria-pressed", String(on));
    },
  };
  const confirm = (act) => {
    const [box, yes] = ["confirm", "confirm-yes"].map((id) => document.getElementById(id));
    document.getElementById("confirm-title").textContent = `${act.textContent}?`;
    document.getElementById("confirm-will").textContent = act.dataset.will;
    yes.textContent = act.textContent;
    for (const key of ["run", "what", "about"]) yes.dataset[key] = act.dataset[key];
    box.showModal();
  };
  document.addEventListener("click", (event) => {
    const button = event.target.closest?.("button");
    if (button?.dataset.opening) tell("chosen", { data: Number(button.dataset.opening) });
    else if (button?.classList.contains("act")) confirm(button);
    else if (button && actions[button.id]) actions[button.id](button);
  });

  /* ---- contact: every answer counts, also an empty one ---------------------------------------------------- */
  let heard = Date.now();
  const plainFetch = window.fetch.bind(window);
  window.fetch = async (...asked) => {
    const answer = await plainFetch(...asked);
    if (answer.status === 401) { location.reload(); return new Promise(() => {}); } // the form comes instead
    if (answer.ok) { heard = Date.now(); showContact(); }
    return answer;
  };
  const showContact = () => {
    const lost = !document.hidden && Date.now() - heard > LOST_AFTER_MS;
    if (lost === document.body.classList.contains("lost")) return;
    document.body.classList.toggle("lost", lost);
    const box = document.getElementById("lost");
    box.replaceChildren();
    if (lost) {
      const words = document.createElement("strong");
      words.textContent = "This page lost contact.";
      box.append(words, `Last news at ${new Date(heard).toTimeString().slice(0, 8)} by this device's clock. ` +
        "The run itself may still be going. Check the network, then the computer at the bench.");
    }
    tell("look", { data: look() });
  };
  setInterval(showContact, 1000);
  document.addEventListener("visibilitychange", () => {
    if (!document.hidden) heard = Date.now();
    tell("tick", { disabled: document.hidden });
  });

  /* ---- local time beside the run's UTC -------------------------------------------------------------------- */
  const here = (time) => {
    const moment = new Date(time.dateTime);
    if (Number.isNaN(moment.getTime()) || moment.getTimezoneOffset() === 0) return "";
    const clock = moment.toLocaleTimeString([], { hour: "2-digit", minute: "2-digit", hourCycle: "h23" });
    return ` (${clock} here)`;
  };
  const showLocal = () => {
    for (const time of document.querySelectorAll("time.here")) {
      const words = here(time);
      if (time.dataset.here !== words) time.dataset.here = words;
    }
  };
  new MutationObserver(showLocal).observe(document.body, {
    childList: true, subtree: true, attributes: true, attributeFilter: ["datetime"],
  });

  /* ---- figures -------------------------------------------------------------------------------------------- */
  const narrow = () => innerWidth < 600;
  const axis = (more) => ({
    showgrid: false, zeroline: false, showline: true, ticks: "outside", ticklen: 4, fixedrange: true,
    color: colour("soft"), linecolor: colour("edge"), tickcolor: colour("edge"), exponentformat: "none", separatethousands: true, ...more,
  });
  const words = (text, more) => ({
    text, showarrow: false, xref: "paper", yref: "paper", font: { size: 14, color: colour("soft") }, ...more,
  });
  const above = (text, y = 1) => words(text, { x: 0, xanchor: "left", y, yanchor: "bottom", yshift: 6, xshift: -44 });
  const below = (text) => words(text, { x: 1, xanchor: "right", y: 0, yanchor: "top", yshift: -24 });
  const layout = (more) => ({
    margin: { l: 48, r: 14, t: 30, b: 46 }, paper_bgcolor: "rgba(0,0,0,0)", plot_bgcolor: "rgba(0,0,0,0)",
    font: { family: getComputedStyle(document.body).fontFamily, size: 14, color: colour("soft") },
    showlegend: false, hovermode: false, separators: ".\u202f", ...more,
  });
  const line = (x, y, name, width, more) =>
    ({ type: "scatter", mode: "lines", x, y, line: { color: colour(name), width, ...more } });
  const band = (x, low, high, fill) => {
    const at = x.map((_, i) => i).filter((i) => low[i] !== null && high[i] !== null);
    return {
      type: "scatter", mode: "lines", fill: "toself", fillcolor: colour(fill), line: { width: 0 },
      x: [...at.map((i) => x[i]), ...at.toReversed().map((i) => x[i])],
      y: [...at.map((i) => high[i]), ...at.toReversed().map((i) => low[i])],
    };
  };
  const zero = (axisName = "y") => ({
    type: "line", xref: "paper", x0: 0, x1: 1, yref: axisName, y0: 0, y1: 0,
    line: { color: colour("edge"), width: 1 }, layer: "below",
  });
  const draw = (name, build) => (data) => {
    if (!data) throw window.dash_clientside.PreventUpdate;
    if (data.empty) return [window.dash_clientside.no_update, data.empty, data.empty, "image empty"];
    return [build(data), data.alt, data.caption ?? data.alt, `image ${name}`];
  };

  /* The dark bar shrinks as one over the square root of time, from its present half width to the forecast one. */
  const funnel = (d) => {
    const last = d.kappa.length - 1;
    const [now, value] = [d.hours[last], d.kappa[last]];
    const half = d.interval[last];
    const steps = [...Array(21).keys()].map((i) => now + ((d.end - now) * i) / 20);
    const share = (t) => (1 / Math.sqrt(t) - 1 / Math.sqrt(now)) / (1 / Math.sqrt(d.end) - 1 / Math.sqrt(now));
    const at = (t) => half + (d.forecast.half - half) * share(t);
    return [1, -1].map((side) => line(steps, steps.map((t) => value + side * at(t)), "kappa", 2, { dash: "dot" }));
  };
  const goal = (d) => {
    const value = d.kappa.at(-1);
    return {
      type: "scatter", mode: "markers", x: [d.end], y: [value], marker: { size: 1, color: colour("ink") },
      error_y: { type: "constant", value: d.forecast.goal, color: colour("ink"), thickness: 3, width: 7 },
    };
  };
  const bars = (d) => {
    const last = d.kappa.length - 1;
    const dot = { type: "scatter", mode: "markers", x: [d.hours[last]], y: [d.kappa[last]] };
    const bar = (half, name, thickness) => ({
      ...dot, marker: { size: 1, color: colour(name) },
      error_y: { type: "data", array: [half[last]], color: colour(name), thickness, width: 0 },
    });
    const known = d.whole[last] !== null;
    const drawn = known ? [bar(d.whole, "outer", 10), bar(d.interval, "kappa", 4)] : [];
    const marker = { size: 12, color: colour("kappa"), line: { color: colour("ground"), width: 2 } };
    return [...drawn, { ...dot, marker, name: "now" }];
  };
  const night = (d) => {
    const about = (half, fill) => {
      const end = (side) => d.kappa.map((value, i) => (d.whole[i] === null ? null : value + side * half[i]));
      return band(d.hours, end(-1), end(1), fill);
    };
    const traces = [about(d.whole, "outer"), about(d.interval, "inner")];
    const dots = { size: d.kappa.length > 60 ? 3 : 6, color: colour("kappa") };
    traces.push({ type: "scatter", mode: "markers", x: d.hours, y: d.kappa, marker: dots, name: "dots" });
    const notes = [above(`κ, ${d.unit}`), below("hours since the start")];
    const running = d.forecast && d.end > d.hours.at(-1);
    if (running) traces.push(...funnel(d));
    if (running && d.forecast.goal) {
      traces.push(goal(d));
      notes.push({
        text: "goal", showarrow: false, x: d.end, y: d.kappa.at(-1) + d.forecast.goal, yanchor: "bottom",
        font: { size: 14, color: colour("ink") },
      });
    }
    traces.push(...bars(d));
    const end = Math.max(d.end ?? 0, d.hours.at(-1)) * 1.04;
    return {
      data: traces,
      layout: layout({
        xaxis: axis({ range: [0, end], nticks: narrow() ? 6 : 9 }), yaxis: axis({ range: [-d.reach, d.reach], nticks: 7 }),
        shapes: [zero()], annotations: notes,
      }),
    };
  };

  const pattern = (d) => {
    const sign = d.added ? "added" : "taken";
    const measured = { ...line(d.positions, d.measured, sign, 2.5), name: "measured" };
    if (!d.leftover) {
      return {
        data: [measured],
        layout: layout({
          xaxis: axis({ nticks: 7 }), yaxis: axis({ rangemode: "tozero", nticks: 7 }),
          annotations: [above(d.unit), below("detector position, mm")],
        }),
      };
    }
    const low = d.leftover.map((v, i) => (v === null || d.leftover_se[i] === null ? null : v - d.leftover_se[i]));
    const high = d.leftover.map((v, i) => (v === null || d.leftover_se[i] === null ? null : v + d.leftover_se[i]));
    const lower = { yaxis: "y2" };
    return {
      data: [
        { ...line(d.positions, d.predicted, "ribbon", 10), name: "predicted" }, measured,
        { ...band(d.positions, low, high, "outer"), ...lower },
        { ...line(d.positions, d.leftover, "kappa", 2), ...lower, name: "leftover" },
      ],
      layout: layout({
        xaxis: axis({ anchor: "y2", nticks: narrow() ? 5 : 9 }),
        yaxis: axis({ domain: [0.44, 1], rangemode: "tozero", nticks: 6 }), yaxis2: axis({ domain: [0, 0.33], nticks: 5 }),
        shapes: [zero("y2")],
        annotations: [above(d.unit), above(`left over, ${d.leftover_unit}`, 0.33), below("detector position, mm")],
      }),
    };
  };

  const strip = (d) => ({
    data: [
      { ...band(d.hours, d.low, d.high, "dip"), line: { color: colour("dip"), width: 1 } }, { ...line(d.hours, d.mean, "ink", 1.5), name: "mean" },
    ],
    layout: layout({
      xaxis: axis({ range: [0, d.hours.at(-1)], nticks: narrow() ? 6 : 9 }), yaxis: axis({ nticks: 5 }),
      shapes: d.tinted.map((since) => ({
        type: "rect", xref: "x", yref: "paper", x0: since, x1: d.hours.at(-1), y0: 0, y1: 1,
        fillcolor: colour("tint"), line: { width: 0 }, layer: "below",
      })),
      annotations: [above(d.unit), below("hours since the start")],
    }),
  });

  /* ---- plates and the table of numbers: children that Dash knows nothing of -------------------------------- */
  const SVG = "http://www.w3.org/2000/svg";
  const silhouette = (heights) => {
    const known = heights.map((h, i) => [i, h]).filter(([, h]) => h !== null);
    const svg = document.createElementNS(SVG, "svg");
    if (!known.length) return svg;
    svg.setAttribute("viewBox", `0 -1020 ${Math.max(1, heights.length - 1)} 1020`);
    svg.setAttribute("preserveAspectRatio", "none");
    const top = known.map(([i, h]) => `${i} ${-h}`).join("L");
    const area = document.createElementNS(SVG, "path");
    area.setAttribute("d", `M${known[0][0]} 0L${top}L${known.at(-1)[0]} 0Z`);
    area.setAttribute("fill", "currentColor");
    svg.append(area);
    return svg;
  };
  const table = (d) => {
    const made = document.createElement("table");
    const row = (cells, kind) => {
      const tr = made.insertRow();
      for (const cell of cells) {
        const td = tr.appendChild(document.createElement(kind));
        td.textContent = cell ?? "";
        if (kind === "th") td.scope = "col";
      }
    };
    const full = Boolean(d.leftover);
    row(["position, mm", `${d.name}, ${d.unit}`, ...(full ? ["predicted", `left over, ${d.leftover_unit}`, "its error"] : [])], "th");
    (d.measured ?? []).forEach((value, i) => row(
      [d.positions[i], value, ...(full ? [d.predicted[i], d.leftover[i], d.leftover_se[i]] : [])], "td"));
    return made;
  };
  let shown = null;
  const showNumbers = () => {
    if (shown && document.getElementById("numbers-shown")?.open)
      document.getElementById("numbers").replaceChildren(table(shown));
  };
  document.addEventListener("toggle", showNumbers, true);

  /* ---- the form that books once more: a child that Dash knows nothing of ----------------------------------- */
  const field = (label, made) => {
    const box = document.createElement("label");
    box.append(`${label} `, made);
    return box;
  };
  const input = (type, value) => Object.assign(document.createElement("input"), { type, value, required: type !== "text" });
  const showBooking = () => {
    const form = document.getElementById("booking"), place = document.getElementById("booking-fields");
    if (!form?.open || place.childElementCount) return;
    const file = document.createElement("select");
    for (const one of JSON.parse(form.dataset.files)) file.append(new Option(one.name, one.file));
    const day = input("date", new Date().toLocaleDateString("sv")), at = input("time", "18:00"), end = input("time", "");
    const book = Object.assign(document.createElement("button"), { type: "button", className: "act", textContent: "Book" });
    Object.assign(book.dataset, { what: "book", run: "", will: form.dataset.will });
    const gather = () => {
      book.dataset.about = JSON.stringify({ file: file.value, day: day.value, at: at.value, end_by: end.value });
      book.disabled = !day.value || !at.value;
    };
    place.addEventListener("input", gather);
    place.append(field("Run", file), field("Day", day), field("Start, by the bench's clock", at),
      field("Over by (may stay empty)", end), book);
    gather();
  };
  document.addEventListener("toggle", showBooking, true);

  const mark = (heights, now, rail, chosen) => {
    shown = chosen;
    requestAnimationFrame(() => {
      for (const plate of document.querySelectorAll(".plate")) {
        const mask = plate.dataset.opening;
        plate.setAttribute("aria-pressed", String(Number(mask) === chosen?.mask));
        plate.classList.toggle("now", mask === now?.props["data-mask"]);
        plate.querySelector(".silhouette").replaceChildren(silhouette(heights?.[mask] ?? []));
      }
      document.getElementById("numbers-shown").hidden = Boolean(chosen?.empty);
      showNumbers();
      document.title = document.querySelector("h1")?.textContent || "tercet";
    });
    return window.dash_clientside.no_update;
  };

  window.dash_clientside = Object.assign({}, window.dash_clientside, {
    tercet: { night: draw("night", night), pattern: draw("pattern", pattern), strip: draw("strip", strip), mark },
  });
})();
