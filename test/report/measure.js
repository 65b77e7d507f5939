// Runs in a page that holds the report in frames of different widths; says what does not fit, as JSON.
const SLACK = 1;  // px: rounding of boxes

function named(element) {
  const id = element.closest("[id]");
  const text = element.textContent.trim().slice(0, 40);
  return `${element.tagName.toLowerCase()} in #${id ? id.id : "?"} '${text}'`;
}

function boxesOfText(root, view) {
  // one box per line of each text node: what a reader sees as a piece of text
  const boxes = [];
  const walker = root.ownerDocument.createTreeWalker(root, view.NodeFilter.SHOW_TEXT);
  for (let node = walker.nextNode(); node; node = walker.nextNode()) {
    const parent = node.parentElement;
    if (!node.textContent.trim() || parent.closest("style, title") || !parent.checkVisibility()) continue;
    if (parent.closest("details:not([open])") && !parent.closest("summary")) continue;
    const range = root.ownerDocument.createRange();
    range.selectNodeContents(node);
    for (const box of range.getClientRects()) if (box.width > 0) boxes.push({ box, parent });
  }
  return boxes;
}

function overlap(a, b) {
  const x = Math.min(a.right, b.right) - Math.max(a.left, b.left);
  const y = Math.min(a.bottom, b.bottom) - Math.max(a.top, b.top);
  return Math.min(x, y);
}

function faults(frame) {
  const page = frame.contentDocument, view = frame.contentWindow, found = [];
  const root = page.documentElement;
  if (root.scrollWidth > root.clientWidth) found.push(`scrolls sideways: ${root.scrollWidth} > ${root.clientWidth}`);
  for (const element of page.querySelectorAll("body, body *:not(svg *)")) {
    const box = element.getBoundingClientRect();
    if (box.width && (box.right > root.clientWidth + SLACK || box.left < -SLACK)) found.push(`beyond the side: ${named(element)}`);
    const clips = view.getComputedStyle(element).overflow !== "visible";
    const inside = element.scrollWidth > element.clientWidth + SLACK || element.scrollHeight > element.clientHeight + SLACK;
    if (clips && inside && element.tagName !== "svg" && element.clientWidth) found.push(`clipped: ${named(element)}`);
  }
  const texts = boxesOfText(page.body, view);
  for (const { box, parent } of texts) {
    const picture = parent.closest("svg");
    if (!picture) continue;
    const whole = picture.getBoundingClientRect();
    if (box.left < whole.left - SLACK || box.right > whole.right + SLACK || box.top < whole.top - SLACK || box.bottom > whole.bottom + SLACK)
      found.push(`outside its figure: ${named(parent)}`);
    if (frame.dataset.media === "screen" && box.height < 8) found.push(`smaller than 8 px: ${named(parent)}`);
  }
  texts.sort((a, b) => a.box.top - b.box.top);
  for (let i = 0; i < texts.length; i++)
    for (let j = i + 1; j < texts.length && texts[j].box.top < texts[i].box.bottom; j++) {
      const [a, b] = [texts[i], texts[j]];
      const related = a.parent === b.parent || a.parent.contains(b.parent) || b.parent.contains(a.parent);
      if (!related && overlap(a.box, b.box) > 2) found.push(`overlap: ${named(a.parent)} and ${named(b.parent)}`);
    }
  for (const picture of page.querySelectorAll("svg"))
    if (picture.getAttribute("role") !== "img" || !picture.getAttribute("aria-label")) found.push(`no words: ${named(picture)}`);
  return { width: frame.clientWidth, media: frame.dataset.media, texts: texts.length, faults: found };
}

function asPrinted(page) {
  for (const sheet of page.styleSheets)
    for (const rule of sheet.cssRules)
      if (rule.media) rule.media.mediaText = rule.media.mediaText.includes("print") ? "all" : "not all";
}

addEventListener("load", () => {
  const result = [];
  for (const frame of document.querySelectorAll("iframe")) {
    if (frame.dataset.media === "print") asPrinted(frame.contentDocument);
    result.push(faults(frame));
  }
  document.getElementById("result").textContent = JSON.stringify(result);
});
