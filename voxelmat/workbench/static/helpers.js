// Shared pieces: make a node, draw the legend, show the status line.
function element(tag, props, ...children) {
  const node = document.createElement(tag);
  for (const [key, value] of Object.entries(props || {})) {
    if (key in node && key !== 'list') node[key] = value; else node.setAttribute(key, value);
  }
  node.append(...children);
  return node;
}
function legend(model, place) {
  const found = model.get('legend');
  place.replaceChildren();
  for (const item of found.items || []) {
    const swatch = element('span', {className: 'swatch'});
    swatch.style.background = item.colour;
    place.append(element('span', {className: 'item'}, swatch, item.text));
  }
  if (found.ramp) {
    const ramp = element('span', {className: 'ramp'});
    ramp.style.background = `linear-gradient(to right, ${found.ramp.colours.join(',')})`;
    place.append(element('span', {className: 'item'}, found.ramp.low, ramp, found.ramp.high));
  }
}
function status(model, place) {
  const text = model.get('status');
  place.textContent = text;
  place.className = text.startsWith('Error') ? 'status bad' : 'status';
}
