
"use strict";
(() => {
  const OPEN = 65534, NONE = 65535;

  const text = (id) => JSON.parse(document.getElementById(id).textContent);
  const bytes = (packed) => Uint8Array.from(atob(packed), (sign) => sign.charCodeAt(0));
  const shorts = (packed) => new Uint16Array(bytes(packed).buffer);
  const floats = (packed) => new Float32Array(bytes(packed).buffer);
  const clamp = (value, low, high) => Math.min(Math.max(value, low), high);

  const grids = new Map();
  const gridOf = (id) => {
    if (!grids.has(id)) {
      const grid = text(id);
      grids.set(id, { ...grid, cells: shorts(grid.cells), x: floats(grid.x), y: floats(grid.y) });
    }
    return grids.get(id);
  };

  const readingOf = (id) => {
    const told = text(id);
    const list = (name) => (told[name] ? shorts(told[name]) : null);
    return {
      ...told, status: bytes(told.status), limit: list("limit"), low: list("low"), high: list("high"),
    };
  };

  const position = (grid, point) => {
    const x = grid.x[point], y = grid.y[point];
    if (!grid.geographic) {
      return `x ${Number(x.toPrecision(6))}, y ${Number(y.toPrecision(6))}`;
    }
    const turned = ((x + 180) % 360 + 360) % 360 - 180;
    const north = `${Math.abs(y).toFixed(2)}°${y >= 0 ? "N" : "S"}`;
    return `${north} ${Math.abs(turned).toFixed(2)}°${turned >= 0 ? "E" : "W"}`;
  };

  const leadWords = (reading, steps) => {
    const value = steps * reading.step;
    if (!reading.hours || value < 1) {
      return value >= 1000 ? value.toFixed(0) : String(Number(value.toPrecision(3)));
    }
    return value >= 9.95 ? value.toFixed(0) : value.toFixed(1).replace(".0", "");
  };

  const intervalWords = (reading, point) => {
    const low = reading.low ? reading.low[point] : NONE;
    const high = reading.high ? reading.high[point] : NONE;
    if (low >= OPEN && high >= OPEN) {
      return "";
    }
    const from = low < OPEN ? leadWords(reading, low) : "the start";
    const to = high < OPEN ? `${leadWords(reading, high)} ${reading.units}` : "beyond the run";
    return `${reading.interval} ${from} to ${to}`;
  };

  const valueWords = (reading, point) => {
    const limit = reading.limit[point];
    const parts = [];
    if (limit < OPEN) {
      parts.push(`limit ${leadWords(reading, limit)} ${reading.units}`);
    }
    parts.push(reading.words[reading.status[point]] || "within the run");
    const interval = intervalWords(reading, point);
    if (interval) {
      parts.push(interval);
    }
    return parts.join(", ");
  };

  /* The grid point nearest to a place of the map, among those of its cell and the cells around. */
  const nearest = (grid, across, down) => {
    const [west, east, south, north] = grid.window;
    const x = west + across * (east - west), y = north - down * (north - south);
    const column = clamp(Math.floor(across * grid.columns), 0, grid.columns - 1);
    const row = clamp(Math.floor(down * grid.rows), 0, grid.rows - 1);
    if (grid.cells[row * grid.columns + column] === NONE) {
      return -1;
    }
    const narrow = grid.geographic ? Math.cos(y * Math.PI / 180) : 1;
    let best = -1, least = Infinity;
    for (let r = Math.max(row - 1, 0); r <= Math.min(row + 1, grid.rows - 1); r += 1) {
      for (let c = Math.max(column - 1, 0); c <= Math.min(column + 1, grid.columns - 1); c += 1) {
        const point = grid.cells[r * grid.columns + c];
        if (point !== NONE) {
          let wide = Math.abs(grid.x[point] - x);
          wide = grid.geographic ? Math.min(wide % 360, 360 - (wide % 360)) : wide;
          const distance = (wide * narrow) ** 2 + (grid.y[point] - y) ** 2;
          if (distance < least) {
            best = point;
            least = distance;
          }
        }
      }
    }
    return best;
  };

  const wake = (figure) => {
    const field = figure.querySelector(".field");
    const readout = figure.querySelector(".readout");
    const cross = figure.querySelector(".cross");
    const grid = gridOf(figure.dataset.grid);
    let reading = null, shown = null, column = -1, row = -1;

    const tell = (point) => {
      if (point === shown) {
        return;
      }
      reading = reading || readingOf(figure.dataset.reading);
      shown = point;
      if (point < 0) {
        readout.textContent = "Outside the grid.";
        cross.setAttribute("visibility", "hidden");
        delete readout.dataset.status;
        return;
      }
      const where = document.createElement("b");
      where.textContent = position(grid, point);
      readout.replaceChildren(where, valueWords(reading, point));
      readout.dataset.status = reading.status[point];
      const [west, east, south, north] = grid.window;
      for (const circle of cross.children) {
        circle.setAttribute("cx", `${100 * (grid.x[point] - west) / (east - west)}%`);
        circle.setAttribute("cy", `${100 * (north - grid.y[point]) / (north - south)}%`);
      }
      cross.setAttribute("visibility", "visible");
    };

    const point = (event) => {
      const box = field.getBoundingClientRect();
      const across = clamp((event.clientX - box.left) / box.width, 0, 0.999999);
      const down = clamp((event.clientY - box.top) / box.height, 0, 0.999999);
      column = Math.floor(across * grid.columns);
      row = Math.floor(down * grid.rows);
      tell(nearest(grid, across, down));
    };

    const step = (right, down) => {
      if (column < 0) {
        column = Math.floor(grid.columns / 2);
        row = Math.floor(grid.rows / 2);
      } else {
        column = clamp(column + right, 0, grid.columns - 1);
        row = clamp(row + down, 0, grid.rows - 1);
      }
      const found = grid.cells[row * grid.columns + column];
      tell(found === NONE ? -1 : found);
    };

    const ways = { ArrowLeft: [-1, 0], ArrowRight: [1, 0], ArrowUp: [0, -1], ArrowDown: [0, 1] };
    field.addEventListener("pointermove", point);
    field.addEventListener("pointerdown", point);
    field.addEventListener("keydown", (event) => {
      const way = ways[event.key];
      if (way && !event.ctrlKey && !event.altKey && !event.metaKey) {
        event.preventDefault();
        const far = event.shiftKey ? 10 : 1;
        step(way[0] * far, way[1] * far);
      }
    });
    field.addEventListener("focus", () => {
      if (column < 0) {
        step(0, 0);
      }
    });
    field.setAttribute("tabindex", "0");
    field.setAttribute("role", "application");
    field.setAttribute("aria-roledescription", "map");
    field.setAttribute("aria-label", field.dataset.label);
    field.setAttribute("aria-describedby", readout.id);
    readout.textContent = "Point at the map, tap it, or use the arrow keys.";
    readout.hidden = false;
  };

  document.querySelectorAll("figure.map").forEach(wake);
  document.querySelectorAll(".needs-script").forEach((note) => { note.hidden = false; });
})();
