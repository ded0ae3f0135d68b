"use strict";
// Tables sort and filter, figures give their data, parts print alone. The page is complete without any of it.
(() => {
  const all = (selector, root = document) => Array.from(root.querySelectorAll(selector));

  const key = (row, column) => {
    const cell = row.cells[column];
    if (cell.dataset.sort !== undefined) return Number(cell.dataset.sort);
    const datum = cell.querySelector("data");
    const raw = datum && datum.hasAttribute("value") ? datum.value : (datum || cell).textContent.trim();
    if (raw === "" || raw === "–") return null;
    const number = Number(raw);
    return Number.isNaN(number) ? raw.toLowerCase() : number;
  };

  const compared = (a, b) => {
    if (a === b) return 0;
    if (a === null) return 1;
    if (b === null) return -1;
    if (typeof a === "number" && typeof b === "number") return a - b;
    return String(a) < String(b) ? -1 : 1;
  };

  for (const table of all("table.sortable")) {
    const heads = all("thead th", table);
    heads.forEach((head, column) => {
      const button = document.createElement("button");
      button.type = "button";
      button.className = "sort";
      button.textContent = head.textContent;
      head.textContent = "";
      head.append(button);
      button.addEventListener("click", () => {
        const up = head.getAttribute("aria-sort") !== "ascending";
        heads.forEach((other) => other.removeAttribute("aria-sort"));
        head.setAttribute("aria-sort", up ? "ascending" : "descending");
        const rows = Array.from(table.tBodies[0].rows, (row, place) => [key(row, column), place, row]);
        // What is not known stays last, whichever way the rest is turned.
        rows.sort((a, b) => {
          const blank = a[0] === null || b[0] === null;
          return (blank || up ? compared(a[0], b[0]) : compared(b[0], a[0])) || a[1] - b[1];
        });
        table.tBodies[0].append(...rows.map((entry) => entry[2]));
      });
    });
  }

  // As the table shows a long title: cut after 59 characters.
  const shownName = (text) => (text.length > 60 ? text.slice(0, 59) + "…" : text);

  for (const tools of all(".tools")) {
    const table = document.getElementById(tools.dataset.for);
    const rows = Array.from(table.tBodies[0].rows);
    const texts = rows.map((row) => row.textContent.toLowerCase());
    const search = tools.querySelector("input");
    const choice = tools.querySelector("select");
    const told = tools.querySelector(".shown");
    const column = 2;
    if (choice) {
      const names = new Set(rows.map((row) => row.cells[column].textContent.trim()));
      for (const name of Array.from(names).sort()) {
        const option = document.createElement("option");
        option.textContent = name;
        option.value = name;
        choice.append(option);
      }
      choice.addEventListener("change", () => apply());
    }
    const apply = () => {
      const wanted = search.value.toLowerCase().split(/\s+/).filter(Boolean);
      let shown = 0;
      rows.forEach((row, n) => {
        const kept =
          wanted.every((part) => texts[n].includes(part)) &&
          (!choice || !choice.value || row.cells[column].textContent.trim() === choice.value);
        row.hidden = !kept;
        shown += kept ? 1 : 0;
      });
      told.textContent = told.dataset.text.replace("{shown}", shown).replace("{total}", rows.length);
    };
    search.addEventListener("input", apply);
    for (const link of all(`a[data-filter="${tools.dataset.for.replace("table-", "")}"]`)) {
      link.addEventListener("click", () => {
        const name = Array.from(choice.options, (option) => option.value).find((value) => value === shownName(link.dataset.rule));
        choice.value = name ?? "";
        search.value = "";
        apply();
      });
    }
    tools.hidden = false;
    apply();
  }

  const cell = (value) => {
    let text = value === null || value === undefined ? "" : String(value);
    if (typeof value === "string" && /^[=+\-@\t\r]/.test(text)) text = "'" + text;
    return /[",\r\n]/.test(text) ? '"' + text.replaceAll('"', '""') + '"' : text;
  };

  const rowsOf = (figure) => {
    const data = figure.data;
    if (figure.kind === "margins") {
      const bins = data[0].v.length;
      const rows = [["margin_from_percent", ...data.map((one) => one.series)]];
      for (let b = 0; b < bins; b += 1) rows.push([-100 + (200 * b) / bins, ...data.map((one) => one.v[b])]);
      return rows;
    }
    if (figure.kind === "growth") {
      const rows = [data.map((one) => one.series)];
      data[0].v.forEach((_, n) => rows.push(data.map((one) => one.v[n])));
      return rows;
    }
    if (figure.kind === "map") {
      const rows = [["line", "longitude_or_easting", "latitude_or_northing", "state"]];
      const states = ["not assessed", "no section", "advisory", "out of spec"];
      for (const one of data) one.v.forEach((v, n) => rows.push([one.series, one.x[n], one.y[n], states[v]]));
      return rows;
    }
    const rows = [["panel", "series", "unit", "time_utc", "value"]];
    for (const one of data) {
      one.t.forEach((t, n) => {
        rows.push([one.panel, one.series, one.unit, new Date(figure.origin_ms + t).toISOString(), one.v[n]]);
      });
    }
    return rows;
  };

  for (const button of all("button.csv")) {
    button.hidden = false;
    button.addEventListener("click", () => {
      const figure = JSON.parse(document.getElementById(button.dataset.figure + "-data").textContent);
      const text = rowsOf(figure).map((row) => row.map(cell).join(",")).join("\r\n") + "\r\n";
      const link = document.createElement("a");
      link.href = URL.createObjectURL(new Blob([text], { type: "text/csv;charset=utf-8" }));
      link.download = button.dataset.figure + ".csv";
      document.body.append(link);
      link.click();
      link.remove();
      URL.revokeObjectURL(link.href);
    });
  }

  for (const button of all("button.print")) {
    button.hidden = false;
    button.addEventListener("click", () => {
      document.documentElement.dataset.print = button.dataset.print;
      window.print();
    });
  }
  window.addEventListener("afterprint", () => delete document.documentElement.dataset.print);

  // A link to a section inside closed details opens them.
  const reveal = () => {
    const target = location.hash.length > 1 && document.getElementById(decodeURIComponent(location.hash.slice(1)));
    if (!target) return;
    for (let parent = target.parentElement; parent; parent = parent.parentElement) {
      if (parent.tagName === "DETAILS") parent.open = true;
    }
    const evidence = target.querySelector(":scope > details.evidence");
    if (evidence) evidence.open = true;
    target.scrollIntoView();
  };
  window.addEventListener("hashchange", reveal);
  reveal();
})();
