/* Finds what a reader could not read: text that leaves the window, and text too faint for it. */
const visible = (element) => {
  for (let here = element; here; here = here.parentElement) {
    const style = getComputedStyle(here);
    if (style.display === "none" || style.visibility !== "visible" || style.opacity === "0") {
      return false;
    }
    if (style.clipPath.startsWith("inset(50%")) {
      return false;
    }
  }
  return true;
};

const texts = () => {
  const walker = document.createTreeWalker(document.body, NodeFilter.SHOW_TEXT);
  const found = [];
  while (walker.nextNode()) {
    const node = walker.currentNode, owner = node.parentElement;
    if (!node.textContent.trim() || owner.closest("script, style, title, desc, template")) {
      continue;
    }
    if (visible(owner)) {
      const range = document.createRange();
      range.selectNodeContents(node);
      const boxes = [...range.getClientRects()].filter((box) => box.width > 0.5 && box.height > 0.5);
      if (boxes.length) {
        found.push({ node, owner, boxes });
      }
    }
  }
  return found;
};

const clips = (element) => {
  for (let here = element; here && here !== document.body; here = here.parentElement) {
    const style = getComputedStyle(here);
    if (style.overflowX !== "visible" && !(here instanceof SVGElement)) {
      return here;
    }
  }
  return null;
};

const outside = () => {
  const found = [];
  const width = document.documentElement.clientWidth;
  const note = (box, name) => {
    if (box.left < -1 || box.right > width + 1) {
      found.push(`${name}: ${box.left.toFixed(1)} to ${box.right.toFixed(1)} of ${width}`);
    }
  };
  for (const element of document.body.querySelectorAll("*")) {
    if (!element.closest("defs, symbol, script, style, .store") && visible(element)) {
      // What scrolls or is cut by its own frame is held by that frame, which is looked at itself.
      const frame = clips(element.parentElement);
      const box = element.getBoundingClientRect();
      if (!frame && box.width > 0.5 && box.height > 0.5) {
        note(box, element.outerHTML.slice(0, 120));
      }
    }
  }
  for (const { node, owner, boxes } of texts()) {
    if (!clips(owner)) {
      boxes.forEach((box) => note(box, node.textContent.trim().slice(0, 60)));
    }
  }
  return found;
};

/* Colours are told as numbers by the browser itself, whatever they were written as. */
const canvas = document.createElement("canvas").getContext("2d", { willReadFrequently: true });
const rgba = (colour) => {
  canvas.clearRect(0, 0, 1, 1);
  canvas.fillStyle = "rgba(0, 0, 0, 0)";
  canvas.fillStyle = colour;
  canvas.fillRect(0, 0, 1, 1);
  const [red, green, blue, alpha] = canvas.getImageData(0, 0, 1, 1).data;
  return [red, green, blue, alpha / 255];
};
const over = (upper, lower) => [0, 1, 2].map(
  (part) => upper[part] * upper[3] + lower[part] * (1 - upper[3])).concat(1);
/* WCAG 2.2, relative luminance and contrast ratio. */
const luminance = (colour) => {
  const [red, green, blue] = colour.slice(0, 3).map((value) => {
    const share = value / 255;
    return share <= 0.04045 ? share / 12.92 : ((share + 0.055) / 1.055) ** 2.4;
  });
  return 0.2126 * red + 0.7152 * green + 0.0722 * blue;
};
const ratio = (one, other) => {
  const [dark, light] = [luminance(one), luminance(other)].sort((a, b) => a - b);
  return (light + 0.05) / (dark + 0.05);
};

/* What lies below a text, from the top: areas of drawings and grounds of boxes. */
const ground = (owner, box) => {
  const x = Math.min(Math.max(box.left + box.width / 2, 1), innerWidth - 1);
  const y = Math.min(Math.max(box.top + box.height / 2, 1), innerHeight - 1);
  const layers = [];
  for (const element of document.elementsFromPoint(x, y)) {
    const style = getComputedStyle(element);
    if (element === owner || element instanceof SVGTextElement) {
      if (!(element instanceof SVGElement)) {
        layers.push(rgba(style.backgroundColor));
      }
    } else if (element instanceof HTMLImageElement) {
      return null;
    } else if (element instanceof SVGGeometryElement) {
      if (style.fill.startsWith("url")) {
        return null;
      }
      if (style.fill !== "none") {
        const fill = rgba(style.fill);
        fill[3] *= Number(style.fillOpacity) * Number(style.opacity);
        layers.push(fill);
      }
    } else {
      layers.push(rgba(style.backgroundColor));
    }
  }
  return layers.reverse().reduce((lower, upper) => over(upper, lower), [255, 255, 255, 1]);
};

const faint = () => {
  const found = [];
  let counted = 0;
  for (const { node, owner } of texts()) {
    owner.scrollIntoView({ block: "center", inline: "center", behavior: "instant" });
    // A link that stands above the window until the keyboard comes to it.
    document.activeElement.blur();
    owner.closest("a")?.focus({ preventScroll: true });
    const range = document.createRange();
    range.selectNodeContents(node);
    const box = [...range.getClientRects()].find((one) => one.width > 0.5 && one.height > 0.5);
    const style = getComputedStyle(owner);
    const drawn = owner instanceof SVGElement;
    let below = null;
    if (drawn && style.stroke !== "none" && parseFloat(style.strokeWidth) >= 2
        && style.paintOrder.startsWith("stroke")) {
      below = rgba(style.stroke);  // a halo goes all around the letters
    } else {
      below = ground(owner, box);
    }
    const words = node.textContent.trim().slice(0, 60);
    if (below === null) {
      found.push(`${words}: on a picture or pattern, without a halo`);
      continue;
    }
    const ink = over(rgba(drawn ? style.fill : style.color), below);
    const size = parseFloat(style.fontSize);
    const large = size >= 24 || (size >= 18.66 && Number(style.fontWeight) >= 700);
    counted += 1;
    const measured = ratio(ink, below);
    if (measured < (large ? 3 : 4.5)) {
      found.push(`${words}: ${measured.toFixed(2)}, ${ink.map(Math.round)} on ${below.map(Math.round)}`);
    }
  }
  return { counted, found };
};
