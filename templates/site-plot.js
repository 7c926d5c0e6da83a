"use strict";
(() => {
  // Draws the time responses of each chain from their data: choose the upset, read the values at any time.
  const data = JSON.parse(document.getElementById("site-data").textContent);
  const SVG = "http://www.w3.org/2000/svg";
  const WIDEST = 980, NARROWEST = 320, LEFT = 70, RIGHT = 14, TOP = 10, FIRST = 250, NEXT = 130, GAP = 34, BELOW = 34;
  const STEPS = 500;

  function make(parent, name, attributes, text) {
    const element = document.createElementNS(SVG, name);
    for (const [key, value] of Object.entries(attributes)) element.setAttribute(key, value);
    if (text !== undefined) element.textContent = text;
    parent.append(element);
    return element;
  }

  function html(parent, name, properties, text) {
    const element = document.createElement(name);
    Object.assign(element, properties);
    if (text !== undefined) element.textContent = text;
    parent.append(element);
    return element;
  }

  // How a curve is drawn, beside its name.
  const key = (parent, style) => html(parent, "span", { className: `key ${style}` }).setAttribute("aria-hidden", "true");

  // Steps of 1, 2 or 5 times a power of ten, about five of them.
  function ticks(low, high) {
    const rough = (high - low) / 5 || 1;
    const power = 10 ** Math.floor(Math.log10(rough));
    const step = [1, 2, 5, 10].map((factor) => factor * power).find((one) => one >= rough * 0.999);
    const digits = Math.max(0, -Math.floor(Math.log10(step) + 1e-9));
    const found = [];
    for (let at = Math.ceil(low / step - 1e-9); at * step <= high + step * 1e-9; at += 1) found.push(at * step);
    return found.map((value) => [value, printed(value, digits)]);
  }

  const printed = (value, digits) => value.toFixed(digits).replace(/^-(?=0(\.0*)?$)/, "").replace("-", "\u2212");

  function at(curve, time) {
    const { x, y } = curve;
    if (time <= x[0]) return y[0];
    let low = 0, high = x.length - 1;
    if (time >= x[high]) return y[high];
    while (high - low > 1) {
      const middle = (low + high) >> 1;
      if (x[middle] <= time) low = middle; else high = middle;
    }
    const width = x[high] - x[low];
    return width ? y[low] + (y[high] - y[low]) * (time - x[low]) / width : y[high];
  }

  for (const figure of document.querySelectorAll("figure[data-plot]")) {
    const chain = data[Number(figure.dataset.plot)];
    const curves = chain.upsets.flatMap((upset) => upset.panels.flatMap((panel) => panel.curves));
    const styles = Object.fromEntries(curves.map((curve) => [curve.name, curve.style]));
    const names = Object.keys(styles);
    const plot = document.createElement("figure");
    plot.className = "plot";
    plot.setAttribute("aria-label", `Time responses of ${chain.tag}`);
    const id = `plot-${figure.dataset.plot}`;

    const upsets = html(plot, "fieldset", {});
    html(upsets, "legend", {}, "Upset");
    chain.upsets.forEach((upset, index) => {
      const label = html(upsets, "label", {});
      html(label, "input", { type: "radio", name: `${id}-upset`, value: String(index), checked: index === 0 });
      label.append(upset.name);
    });
    const compared = html(plot, "fieldset", {});
    html(compared, "legend", {}, "Curves");
    for (const name of names) {
      const label = html(compared, "label", {});
      html(label, "input", { type: "checkbox", name: `${id}-curve`, value: name, checked: true });
      key(label, styles[name]);
      label.append(name);
    }
    const drawing = make(plot, "svg", { role: "img" });
    const slider = html(plot, "p", { className: "time" });
    const sliderLabel = html(slider, "label", { htmlFor: `${id}-time` }, "Time");
    const range = html(slider, "input", { type: "range", id: `${id}-time`, min: "0", max: String(STEPS), value: "0", step: "1" });
    const readings = html(plot, "table", { className: "data readings" });
    figure.before(plot);
    figure.classList.add("drawn");
    // The caption of the drawing holds for both.
    const caption = figure.querySelector("figcaption");
    if (caption) plot.append(caption.cloneNode(true));

    let cursor = null;
    let width = 0;
    const chosen = () => chain.upsets[Number(upsets.querySelector("input:checked").value)];
    const isShown = (curve) => [...compared.querySelectorAll("input")].some((box) => box.checked && box.value === curve.name);

    function draw() {
      const upset = chosen();
      width = Math.min(WIDEST, Math.max(NARROWEST, plot.clientWidth));
      const last = upset.panels.length - 1;
      const height = TOP + FIRST + last * (GAP + NEXT) + BELOW;
      drawing.replaceChildren();
      drawing.setAttribute("viewBox", `0 0 ${width} ${height}`);
      drawing.setAttribute("aria-label", `${upset.name}. The values stand in the table below, at the time chosen.`);
      const end = Math.max(...upset.panels.flatMap((panel) => panel.curves.map((curve) => curve.x.at(-1))), 1e-9);
      const toX = (time) => LEFT + (width - LEFT - RIGHT) * time / end;
      const scales = [];
      upset.panels.forEach((panel, index) => {
        const top = TOP + (index ? FIRST + GAP + (index - 1) * (NEXT + GAP) : 0), bottom = top + (index ? NEXT : FIRST);
        const curves = panel.curves.filter(isShown);
        // The scale is that of all curves: hiding one does not move the others.
        let low = Math.min(...panel.curves.flatMap((curve) => curve.y)), high = Math.max(...panel.curves.flatMap((curve) => curve.y));
        const span = high - low || Math.abs(high) * 0.1 || 1;
        const limits = panel.limits.filter((limit) => limit.value >= low - 0.6 * span && limit.value <= high + 0.6 * span);
        low = Math.min(low, ...limits.map((limit) => limit.value)) - 0.05 * span;
        high = Math.max(high, ...limits.map((limit) => limit.value)) + 0.05 * span;
        const toY = (value) => bottom - (bottom - top) * (value - low) / (high - low);
        scales.push(toY);
        for (const [value, text] of ticks(low, high)) {
          make(drawing, "line", { class: "grid", x1: LEFT, x2: width - RIGHT, y1: toY(value), y2: toY(value) });
          make(drawing, "text", { x: LEFT - 6, y: toY(value) + 4, "text-anchor": "end" }, text);
        }
        for (const [value, text] of ticks(0, end)) {
          make(drawing, "line", { class: "grid", x1: toX(value), x2: toX(value), y1: top, y2: bottom });
          if (index === last) make(drawing, "text", { x: toX(value), y: bottom + 16, "text-anchor": "middle" }, text);
        }
        make(drawing, "path", { class: "axis", d: `M${LEFT} ${top}V${bottom}H${width - RIGHT}` });
        make(drawing, "text", { x: 13, y: (top + bottom) / 2, "text-anchor": "middle", transform: `rotate(-90 13 ${(top + bottom) / 2})` }, panel.y);
        if (panel.x) make(drawing, "text", { x: (LEFT + width - RIGHT) / 2, y: bottom + 31, "text-anchor": "middle" }, panel.x);
        for (const limit of limits) {
          make(drawing, "line", { class: "limit", x1: LEFT, x2: width - RIGHT, y1: toY(limit.value), y2: toY(limit.value) });
          make(drawing, "text", { x: width - RIGHT - 4, y: toY(limit.value) + (limit.value > (low + high) / 2 ? 13 : -4), "text-anchor": "end" }, limit.name);
        }
        for (const curve of curves) {
          const points = curve.x.map((time, k) => `${toX(time).toFixed(1)} ${toY(curve.y[k]).toFixed(1)}`);
          make(drawing, "path", { class: `curve ${curve.style}`, d: `M${points.join("L")}` });
        }
      });
      cursor = { end, toX, scales, group: make(drawing, "g", {}), height, unit: upset.panels[last].x.replace(/^[^,]*,\s*/, "") };
      read();
    }

    function read() {
      const upset = chosen();
      const time = cursor.end * Number(range.value) / STEPS;
      const x = cursor.toX(time);
      cursor.group.replaceChildren();
      make(cursor.group, "line", { class: "cursor", x1: x, x2: x, y1: TOP, y2: cursor.height - BELOW });
      const digits = Math.max(0, 2 - Math.floor(Math.log10(cursor.end)));
      const told = `${printed(time, digits)} ${cursor.unit}`;
      readings.replaceChildren();
      html(readings, "caption", {}, `At ${told} after the upset`);
      const head = html(html(readings, "thead", {}), "tr", {});
      const body = html(readings, "tbody", {});
      html(head, "th", { scope: "col" }, "Curve");
      upset.panels.forEach((panel) => html(head, "th", { scope: "col" }, panel.y));
      const spoken = [told];
      for (const name of names) {
        const found = upset.panels.map((panel) => panel.curves.find((curve) => curve.name === name && isShown(curve)));
        if (!found.some(Boolean)) continue;
        const row = html(body, "tr", {});
        const cell = html(row, "th", { scope: "row" });
        key(cell, styles[name]);
        cell.append(name);
        found.forEach((curve, index) => {
          const value = curve ? at(curve, time) : null;
          html(row, "td", {}, curve ? printed(value, upset.panels[index].digits) : "");
          if (!curve) return;
          make(cursor.group, "circle", { class: "dot", cx: x, cy: cursor.scales[index](value), r: 3.5 });
          spoken.push(`${name} ${printed(value, upset.panels[index].digits)} ${upset.panels[index].y.replace(/^[^,]*,\s*/, "")}`);
        });
      }
      range.setAttribute("aria-valuetext", spoken.join(", "));
    }

    const point = (event) => {
      const box = drawing.getBoundingClientRect();
      const x = (event.clientX - box.left) * width / box.width;
      range.value = String(Math.round(STEPS * Math.min(1, Math.max(0, (x - LEFT) / (width - LEFT - RIGHT)))));
      read();
    };
    drawing.addEventListener("pointermove", point);
    drawing.addEventListener("pointerdown", point);
    range.addEventListener("input", read);
    upsets.addEventListener("change", draw);
    compared.addEventListener("change", draw);
    // Letters keep their size on a narrow screen.
    addEventListener("resize", () => { if (plot.clientWidth && plot.clientWidth !== width) draw(); });
    sliderLabel.title = "Arrow keys move by a five-hundredth of the time shown, Page Up and Page Down by more";
    draw();
  }
})();
