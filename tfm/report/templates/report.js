"use strict";
(() => {
  document.documentElement.classList.add("js");
  const data = JSON.parse(document.getElementById("data").textContent);
  const $ = (id) => document.getElementById(id);
  const table = $("fields"), body = table.tBodies[0], rows = [...body.rows], heads = [...table.tHead.rows[0].cells];
  const order = new Map(rows.map((r, i) => [r, i]));
  const boxes = [...document.querySelectorAll("input[name=status]")];
  const numbers = [...document.querySelectorAll("[data-min],[data-max]")];
  const key = "tfm-decisions:" + data.run;

  // Decisions: kept by the browser when it lets us, else for as long as the page is open.
  let decisions = Object.assign({}, data.decisions), storage = true;
  try { decisions = Object.assign(decisions, JSON.parse(localStorage.getItem(key) || "{}")); } catch { storage = false; }
  const remember = () => { if (storage) { try { localStorage.setItem(key, JSON.stringify(decisions)); } catch { storage = false; } } };
  // A thousand menus make a page slow: a row gets its own when it comes near the window.
  const equip = (row) => {
    const cell = row.querySelector(".choice");
    if (cell.firstChild) return;
    const menu = document.createElement("select"), note = document.createElement("input");
    for (const word of ["", "keep", "exclude"]) menu.add(new Option(word || "—", word));
    menu.setAttribute("aria-label", "Decision for " + row.dataset.field);
    note.setAttribute("aria-label", "Note on " + row.dataset.field);
    note.placeholder = "note";
    cell.append(menu, note);
    paint(row);
  };
  const near = new IntersectionObserver((seen) => {
    for (const s of seen) if (s.isIntersecting) { near.unobserve(s.target); equip(s.target); }
  }, { rootMargin: "1200px" });
  const paint = (row) => {
    const d = decisions[row.dataset.field] || {}, cell = row.querySelector(".choice");
    if (cell.firstChild) {
      cell.querySelector("select").value = d.decision || "";
      cell.querySelector("input").value = d.note || "";
    }
    row.dataset.decision = d.decision || "none";
    row.classList.toggle("excluded", d.decision === "exclude");
  };
  rows.forEach((row) => { paint(row); near.observe(row); });
  body.addEventListener("change", (event) => {
    const row = event.target.closest("tr");
    if (!row || !event.target.closest(".choice")) return;
    const decision = row.querySelector(".choice select").value, note = row.querySelector(".choice input").value.trim();
    if (decision || note) decisions[row.dataset.field] = { decision, note }; else decisions[row.dataset.field] = { decision: "", note: "" };
    remember(); paint(row); count();
  });

  // Sorting and filtering: the state lives in the address, so that it can be shared.
  const state = { q: "", status: [], condition: "", decision: "", sort: "", dir: "", limits: {} };
  const fromHash = () => {
    const p = new URLSearchParams(location.hash.slice(1));
    state.q = p.get("q") || "";
    state.status = (p.get("status") || "").split(",").filter(Boolean);
    state.condition = p.get("condition") || "";
    state.decision = p.get("decision") || "";
    state.sort = p.get("sort") || "";
    state.dir = p.get("dir") === "descending" ? "descending" : "ascending";
    state.limits = {};
    for (const box of numbers) {
      const name = box.dataset.min ? box.dataset.min + ".min" : box.dataset.max + ".max";
      if (p.get(name)) state.limits[name] = Number(p.get(name));
    }
  };
  const toHash = () => {
    const p = new URLSearchParams();
    if (state.q) p.set("q", state.q);
    if (state.status.length) p.set("status", state.status.join(","));
    if (state.condition) p.set("condition", state.condition);
    if (state.decision) p.set("decision", state.decision);
    for (const [k, v] of Object.entries(state.limits)) p.set(k, String(v));
    if (state.sort) { p.set("sort", state.sort); p.set("dir", state.dir); }
    const text = p.toString();
    history.replaceState(null, "", text ? "#" + text : location.pathname + location.search);
  };
  const toControls = () => {
    $("q").value = state.q;
    boxes.forEach((b) => { b.checked = state.status.includes(b.value); });
    if ($("condition")) $("condition").value = state.condition;
    $("decision").value = state.decision;
    for (const box of numbers) {
      const name = box.dataset.min ? box.dataset.min + ".min" : box.dataset.max + ".max";
      box.value = name in state.limits ? state.limits[name] : "";
    }
    if (Object.keys(state.limits).length) $("limits").open = true;
  };
  const fromControls = () => {
    state.q = $("q").value.trim();
    state.status = boxes.filter((b) => b.checked).map((b) => b.value);
    state.condition = $("condition") ? $("condition").value : "";
    state.decision = $("decision").value;
    state.limits = {};
    for (const box of numbers) if (box.value !== "") state.limits[box.dataset.min ? box.dataset.min + ".min" : box.dataset.max + ".max"] = Number(box.value);
  };
  const passes = (row) => {
    const d = row.dataset;
    if (state.q && !state.q.toLowerCase().split(/\s+/).every((w) => d.search.includes(w))) return false;
    if (state.status.length && !state.status.includes(d.status)) return false;
    if (state.condition && d.condition !== state.condition) return false;
    if (state.decision && d.decision !== state.decision) return false;
    for (const [name, limit] of Object.entries(state.limits)) {
      const [k, end] = name.split(".");
      if (!d[k]) return false;  // not measured: neither above nor below
      if (end === "min" ? Number(d[k + "High"] || d[k]) < limit : Number(d[k + "Low"] || d[k]) > limit) return false;
    }
    return true;
  };
  const severity = { failed: 0, unfinished: 1, caution: 2, ok: 3 };
  const compare = (a, b) => {
    const k = state.sort, x = a.dataset[k] || "", y = b.dataset[k] || "", sign = state.dir === "descending" ? -1 : 1;
    if (k === "status") return sign * (severity[x] - severity[y]) || order.get(a) - order.get(b);
    if ((x === "") !== (y === "")) return x === "" ? 1 : -1;  // unmeasured last, whatever the direction
    const nx = Number(x), ny = Number(y);
    const by = Number.isNaN(nx) || Number.isNaN(ny) ? x.localeCompare(y, undefined, { numeric: true }) : nx - ny;
    return sign * by || order.get(a) - order.get(b);
  };
  const count = () => {
    const shown = rows.filter((r) => !r.hidden), out = rows.filter((r) => r.dataset.decision === "exclude").length;
    $("shown").textContent = `${shown.length} of ${rows.length} fields shown` + (out ? `, ${out} marked "exclude"` : "") + "." +
      (storage ? "" : " This browser keeps no decisions: save decisions.csv before you close the page.");
  };
  const apply = () => {
    for (const row of rows) row.hidden = !passes(row);
    const sorted = state.sort ? [...rows].sort(compare) : rows;
    if (sorted.some((r, i) => body.rows[i] !== r)) body.append(...sorted);
    for (const head of heads) if (head.dataset.key) head.setAttribute("aria-sort", head.dataset.key === state.sort ? state.dir : "none");
    count();
  };
  for (const head of heads) {
    if (!head.dataset.key) continue;
    const button = document.createElement("button");
    button.type = "button";
    button.append(...head.childNodes);
    head.append(button);
    button.addEventListener("click", () => {
      state.dir = state.sort === head.dataset.key && state.dir === "ascending" ? "descending" : "ascending";
      state.sort = head.dataset.key;
      toHash(); apply();
    });
  }
  const changed = () => { fromControls(); toHash(); apply(); };
  $("controls").addEventListener("input", (event) => { if (event.target.id !== "import") changed(); });
  $("reset").addEventListener("click", () => { history.replaceState(null, "", location.pathname + location.search); fromHash(); toControls(); apply(); });
  addEventListener("hashchange", () => {
    if (document.getElementById(location.hash.slice(1))) return;  // an ordinary jump within the page
    fromHash(); toControls(); apply();
    if (location.hash.includes("=")) $("all").scrollIntoView();
  });

  // Files out and in.
  const cell = (text) => (/[",\r\n]/.test(text) ? '"' + text.replaceAll('"', '""') + '"' : text);
  const line = (parts) => parts.map((p) => cell(String(p ?? ""))).join(",") + "\n";
  const save = (name, text) => {
    const link = document.createElement("a");
    link.href = URL.createObjectURL(new Blob([text], { type: "text/csv" }));
    link.download = name;
    document.body.append(link); link.click(); link.remove();
    setTimeout(() => URL.revokeObjectURL(link.href), 1000);
  };
  const sheetText = () => {
    const shown = new Set(rows.filter((r) => !r.hidden && r.dataset.decision !== "exclude").map((r) => r.dataset.field));
    return line(data.header) + data.sheet.filter((r) => shown.has(r.field)).map((r) => line(data.header.map((h) => r[h]))).join("");
  };
  const decisionsText = () => "field,decision,note\n" + rows.map((r) => r.dataset.field)
    .filter((f) => decisions[f] && (decisions[f].decision || decisions[f].note))
    .map((f) => line([f, decisions[f].decision, decisions[f].note])).join("");
  if (data.sheet.length) $("export-sheet").addEventListener("click", () => save("sheet_selected.csv", sheetText()));
  else { $("export-sheet").disabled = true; $("export-sheet").title = "this results folder does not hold its sheet"; }
  $("export-decisions").addEventListener("click", () => save("decisions.csv", decisionsText()));
  const parse = (text) => {
    const out = [[]];
    for (const m of text.replace(/^\uFEFF/, "").matchAll(/("(?:[^"]|"")*"|[^",\r\n]*)(,|\r?\n|$)/g)) {
      if (m[0] === "" ) break;
      out.at(-1).push(m[1].startsWith('"') ? m[1].slice(1, -1).replaceAll('""', '"') : m[1]);
      if (m[2] !== ",") out.push([]);
    }
    return out.filter((r) => r.length > 1 || r[0]);
  };
  $("import").addEventListener("change", async (event) => {
    const file = event.target.files[0];
    if (!file) return;
    const [head, ...lines] = parse(await file.text());
    const at = ["field", "decision", "note"].map((c) => (head || []).indexOf(c));
    if (at[0] < 0 || at[1] < 0) { $("shown").textContent = `${file.name} has no columns "field" and "decision".`; return; }
    for (const l of lines) decisions[l[at[0]]] = { decision: l[at[1]] || "", note: at[2] < 0 ? "" : l[at[2]] || "" };
    remember(); rows.forEach(paint); apply();
    event.target.value = "";
  });

  fromHash(); toControls(); apply();
})();
