"use strict";
(() => {
  const make = (tag, inside, ...children) => {
    const one = document.createElement(tag);
    Object.assign(one, inside);
    one.append(...children);
    return one;
  };

  // ---- tables that sort by their heads; rows without a figure stay at the end
  const compare = (one, other) => {
    const [a, b] = [Number(one), Number(other)];
    return Number.isNaN(a) || Number.isNaN(b) ? one.localeCompare(other, undefined, { numeric: true }) : a - b;
  };
  for (const table of document.querySelectorAll("table.sortable")) {
    const heads = [...table.tHead.rows[0].cells];
    const body = table.tBodies[0];
    const sort = (column) => {
      const head = heads[column];
      // figures first from the highest down, words and ranks from the first up
      const first = column === 0 || head.classList.contains("w") ? "ascending" : "descending";
      const now = head.getAttribute("aria-sort");
      const way = !now ? first : now === "ascending" ? "descending" : "ascending";
      const sign = way === "ascending" ? 1 : -1;
      const rows = [...body.rows].map((row) => [row.cells[column].dataset.key, row]);
      rows.sort(([a], [b]) => (a === "" || b === "" ? (a === "") - (b === "") : sign * compare(a, b)));
      body.append(...rows.map(([, row]) => row));
      heads.forEach((one) => one.removeAttribute("aria-sort"));
      head.setAttribute("aria-sort", way);
    };
    table.closest(".table").querySelector(".caption").append(make("span", { className: "hint", textContent: ", sorted by a click on a head" }));
    heads.forEach((head, column) => {
      const button = make("button", { type: "button" }, ...head.childNodes);
      button.addEventListener("click", () => sort(column));
      head.replaceChildren(button);
    });
  }

  // ---- a map over any two axes
  const source = document.getElementById("study-data");
  if (!source) return;
  const data = JSON.parse(source.textContent);
  const MOST_WIDE = 16;

  const written = (value, figure) => {
    const scaled = value * figure.scale;
    let text = Math.abs(scaled).toFixed(figure.digits);
    const nil = !/[1-9]/.test(text);
    if (scaled < 0 && !nil) text = "\u2212" + text;
    else if (figure.sign && !nil) text = "+" + text;
    return text;
  };
  const median = (values) => {
    const sorted = [...values].sort((a, b) => a - b);
    const middle = sorted.length >> 1;
    return sorted.length % 2 ? sorted[middle] : (sorted[middle - 1] + sorted[middle]) / 2;
  };
  const choice = (name, options, chosen) => {
    const select = make("select", {}, ...options.map(([value, text]) => make("option", { value, textContent: text })));
    select.value = chosen;
    return [make("label", {}, name, select), select];
  };

  const explore = (place) => {
    const group = data.groups[place.dataset.group];
    if (!group) return;
    const { axes, values } = group;
    const count = values[data.figures[0].field].length;
    const sizes = axes.map((axis) => axis.labels.length);
    const position = (row) => {
      let rest = group.at ? group.at[row] : row;
      const found = new Array(sizes.length);
      for (let axis = sizes.length - 1; axis >= 0; axis--) {
        found[axis] = rest % sizes[axis];
        rest = Math.floor(rest / sizes[axis]);
      }
      return found;
    };
    const positions = Array.from({ length: count }, (_, row) => position(row));

    const names = axes.map((axis, number) => [String(number), axis.name]);
    const [figureLabel, figureChoice] = choice("figure", data.figures.map((one, n) => [String(n), one.title]), "0");
    const [acrossLabel, acrossChoice] = choice("across", names, "0");
    const [downLabel, downChoice] = choice("down", names, "1");
    const rest = axes.map((axis) =>
      choice(axis.name, [["", "median over all"], ...axis.labels.map((label, n) => [String(n), label])], ""));
    const region = make("div", { className: "scroll", tabIndex: 0 });
    region.setAttribute("role", "region");
    const readout = make("p", { className: "readout" });
    readout.setAttribute("aria-live", "polite");
    const note = make("p", { className: "note" });

    const draw = () => {
      const figure = data.figures[Number(figureChoice.value)];
      const [across, down] = [Number(acrossChoice.value), Number(downChoice.value)];
      rest.forEach(([label], axis) => { label.hidden = axis === across || axis === down; label.style.display = label.hidden ? "none" : ""; });
      const wanted = rest.map(([, select], axis) => (axis === across || axis === down || !select.value ? null : Number(select.value)));
      const cells = Array.from({ length: sizes[down] }, () => Array.from({ length: sizes[across] }, () => []));
      values[figure.field].forEach((value, row) => {
        const at = positions[row];
        if (value !== null && wanted.every((one, axis) => one === null || at[axis] === one)) cells[at[down]][at[across]].push(value);
      });
      const shown = cells.map((row) => row.map((found) => (found.length ? median(found) : null)));
      const flat = shown.flat().filter((value) => value !== null);
      const signed = figure.sign;
      const low = flat.reduce((a, b) => Math.min(a, b), Infinity), high = flat.reduce((a, b) => Math.max(a, b), -Infinity);
      const reach = Math.max(Math.abs(low), Math.abs(high), 1e-12);
      const shade = (value) => {
        if (signed) return `rgba(var(${value < 0 ? "--down" : "--up"}), ${(0.8 * Math.abs(value) / reach).toFixed(3)})`;
        return `rgba(var(--up), ${(high > low ? 0.8 * (value - low) / (high - low) : 0).toFixed(3)})`;
      };
      const cellOf = (row) => (row === null ? null : [positions[row][down], positions[row][across]]);
      const marks = [["own", cellOf(group.own), group.own], ["best", cellOf(group.best), group.best]].filter(
        ([, , row]) => row !== null && wanted.every((one, axis) => one === null || positions[row][axis] === one));
      const fine = sizes[across] > MOST_WIDE;
      const every = fine ? Math.ceil(sizes[across] / 12) : 1;
      const everyDown = sizes[down] > 40 ? Math.ceil(sizes[down] / 20) : fine ? 2 : 1;
      const head = make("tr", {}, make("td", {}), ...axes[across].labels.map((label, n) =>
        make("th", { scope: "col", textContent: n % every ? "" : label })));
      const body = make("tbody", {}, ...shown.map((row, y) =>
        make("tr", {}, make("th", { scope: "row", textContent: y % everyDown ? "" : axes[down].labels[y] }),
          ...row.map((value, x) => {
            const cell = make("td", { textContent: value === null ? "" : written(value, figure) });
            cell.dataset.at = `${y},${x}`;
            if (value === null) cell.className = "none";
            else cell.style.backgroundColor = shade(value);
            marks.forEach(([name, at]) => { if (at[0] === y && at[1] === x) cell.classList.add(name); });
            return cell;
          }))));
      const table = make("table", { className: fine ? "fine" : "" }, make("thead", {}, head), body);
      region.setAttribute("aria-label", `${figure.title} by ${axes[down].name} and ${axes[across].name}`);
      region.replaceChildren(table);
      const other = axes.map((axis, n) => n).filter((n) => n !== across && n !== down && wanted[n] === null);
      readout.textContent = "";
      note.textContent = (signed ? "Blue above zero, orange below, grey none. " : "The stronger the higher, grey none. ")
        + (figure.unit ? `In ${figure.unit === "%" ? "percent" : "points"}. ` : "")
        + (other.length ? `Median over ${other.map((n) => axes[n].name).join(", ")}. ` : "")
        + marks.map(([name]) => (name === "own" ? "Outlined: your overlay. " : "Dotted: the best. ")).join("")
        + (flat.length ? `From ${written(low, figure)} to ${written(high, figure)}.` : "No overlay has this figure here.");
      const tell = (event) => {
        const cell = event.target.closest("td[data-at]");
        if (!cell) return;
        const [y, x] = cell.dataset.at.split(",").map(Number);
        const value = shown[y][x];
        readout.textContent = `${axes[down].name} ${axes[down].labels[y]}, ${axes[across].name} ${axes[across].labels[x]}: `
          + (value === null ? "none" : written(value, figure) + figure.unit);
      };
      table.addEventListener("mouseover", tell);
      table.addEventListener("click", tell);
    };

    // an axis chosen twice changes places with the other
    let last = ["0", "1"];
    const turned = () => {
      if (acrossChoice.value === downChoice.value) {
        if (acrossChoice.value !== last[0]) downChoice.value = last[0];
        else acrossChoice.value = last[1];
      }
      last = [acrossChoice.value, downChoice.value];
      draw();
    };
    [acrossChoice, downChoice].forEach((select) => select.addEventListener("change", turned));
    [figureChoice, ...rest.map(([, select]) => select)].forEach((select) => select.addEventListener("change", draw));
    place.append(
      make("p", { className: "caption", textContent: "A map to turn: any figure over any two axes" }),
      make("div", { className: "choices" }, figureLabel, acrossLabel, downLabel, ...rest.map(([label]) => label)),
      region, readout, note);
    place.hidden = false;
    draw();
  };
  document.querySelectorAll(".explorer").forEach(explore);
})();
