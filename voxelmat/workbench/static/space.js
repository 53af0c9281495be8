// JPEG frames of the part in space: turned, moved, cut, picked from and measured; its tool bar.
function render({model, el}) {
  const image = element('img', {tabIndex: 0, draggable: false, className: 'space'});
  image.setAttribute('aria-description',
    'Drag or arrow keys turn; shift with them moves; plus and minus zoom; x, y, z and i choose a ' +
    'view; f fits; [ and ] move the cut, c changes its axis, o its side; p picks what lies in the ' +
    'middle; m measures.');
  const cross = element('span', {className: 'cross', ariaHidden: 'true'});
  const frame = element('div', {className: 'picture'}, image, cross);
  const said = element('div', {className: 'said', role: 'status'});
  const key = element('div', {className: 'row legend'});
  const line = element('div', {className: 'status', role: 'status'});
  const queue = new Map();
  let address = null, drag = null, busy = false, sent = 0, sliding = 0;

  // One message on its way; moves add up, of anything else the last one counts.
  function send(message) {
    const old = queue.get(message.kind);
    if (old && ['turn', 'pan', 'slide'].includes(message.kind)) {
      message = {...message, dx: old.dx + message.dx, dy: old.dy + message.dy};
    } else if (old && message.kind === 'zoom') message = {...message, factor: old.factor * message.factor};
    const name = ['see', 'pick'].includes(message.kind) ? `${message.kind} ${JSON.stringify(message)}` : message.kind;
    queue.delete(name);
    queue.set(name, message);
    next();
  }
  function next() {
    if (busy || !queue.size) return;
    const [name, message] = queue.entries().next().value;
    queue.delete(name);
    busy = true; sent = performance.now();
    try { model.send(message); }
    catch { queue.clear(); busy = false; return; }     // the kernel is gone; the picture stays
    setTimeout(() => { if (busy && performance.now() - sent > 4900) { busy = false; next(); } }, 5000);
  }
  const tools = toolbar(model, send, () => sliding = performance.now());
  el.append(element('div', {className: 'vm vm-space'}, tools.node, frame, said, key, line));

  function show() {
    image.alt = model.get('label');
    legend(model, key);
    const found = model.get('tools');
    if (found.painted === 'material') key.replaceChildren();   // the tool bar names them
    tools.update(found, performance.now() - sliding > 600);
    said.textContent = model.get('said');
    const data = model.get('frame');
    if (!data.byteLength) return;
    const old = address, seq = model.get('seq');
    address = URL.createObjectURL(new Blob([data], {type: 'image/jpeg'}));
    image.onload = () => { if (old) URL.revokeObjectURL(old); image.dataset.seq = seq; };
    image.src = address;
  }
  const high = () => image.getBoundingClientRect().height || 1;
  const share = e => {
    const box = image.getBoundingClientRect();
    return [(e.clientX - box.left) / box.width, (e.clientY - box.top) / box.height];
  };
  image.addEventListener('pointerdown', e => {
    if (e.button > 1) return;
    image.setPointerCapture(e.pointerId);
    const kind = e.altKey || e.ctrlKey ? 'slide' : e.shiftKey || e.button === 1 ? 'pan' : 'turn';
    drag = {kind, x: e.clientX, y: e.clientY, far: 0, plain: e.button === 0 && kind === 'turn'};
    image.focus({preventScroll: true}); e.preventDefault();
  });
  image.addEventListener('pointermove', e => {
    if (!drag) return;
    const dx = e.clientX - drag.x, dy = e.clientY - drag.y;
    drag.far += Math.abs(dx) + Math.abs(dy);
    if (drag.far < 4) return;                          // a click trembles
    const by = drag.kind === 'turn' ? 1 : 1 / high();
    send({kind: drag.kind, dx: dx * by, dy: dy * by, moving: true});
    drag.x = e.clientX; drag.y = e.clientY;
  });
  image.addEventListener('pointerup', e => {
    if (!drag) return;
    const {far, plain} = drag;
    drag = null;
    if (far >= 4) send({kind: 'still'});
    else if (plain) { const [x, y] = share(e); send({kind: 'pick', x, y}); }
  });
  image.addEventListener('pointercancel', () => { drag = null; send({kind: 'still'}); });
  image.addEventListener('auxclick', e => e.preventDefault());
  image.addEventListener('wheel', e => {
    send({kind: 'zoom', factor: e.deltaY < 0 ? 1.1 : 1 / 1.1}); e.preventDefault();
  }, {passive: false});
  image.addEventListener('keydown', e => {
    const arrow = {ArrowLeft: [-1, 0], ArrowRight: [1, 0], ArrowUp: [0, -1], ArrowDown: [0, 1]}[e.key];
    if (e.ctrlKey || e.metaKey || e.altKey) return;
    if (arrow && e.shiftKey) send({kind: 'pan', dx: 0.05 * arrow[0], dy: 0.05 * arrow[1]});
    else if (arrow) send({kind: 'turn', dx: 20 * arrow[0], dy: 20 * arrow[1]});
    else if (e.key === '+' || e.key === '=') send({kind: 'zoom', factor: 1.1});
    else if (e.key === '-') send({kind: 'zoom', factor: 1 / 1.1});
    else if (e.key === 'p') send({kind: 'pick', x: 0.5, y: 0.5});
    else if (!tools.key(e.key)) return;
    e.preventDefault(); e.stopPropagation();
  });
  model.on('msg:custom', (message, buffers) => {
    if (message.kind !== 'picture') return;
    const url = URL.createObjectURL(new Blob([buffers[0]], {type: 'image/png'}));
    const link = element('a', {href: url, download: message.name});
    document.body.append(link); link.click(); link.remove();
    setTimeout(() => URL.revokeObjectURL(url), 10000);
  });
  const paper = () => send({kind: 'paper', dark: document.body.dataset.jpThemeLight === 'false'});
  const theme = new MutationObserver(paper);
  theme.observe(document.body, {attributes: true, attributeFilter: ['data-jp-theme-light']});
  const acknowledged = () => { busy = false; next(); };
  const say = () => { said.textContent = model.get('said'); };
  const complain = () => status(model, line);
  model.on('change:seq', show);
  model.on('change:ack', acknowledged);
  model.on('change:said', say);
  model.on('change:status', complain);
  let wide = 0;                                        // frames as wide as they are shown
  const fill = () => {
    const width = frame.clientWidth;
    if (!el.isConnected || width < 100 || Math.abs(width - wide) < 8) return;
    wide = width;
    send({kind: 'size', width, ratio: window.devicePixelRatio || 1});
  };
  const fits = new ResizeObserver(fill);
  fits.observe(frame);
  show(); complain();
  if (document.body.dataset.jpThemeLight === 'false') paper();
  return () => {
    theme.disconnect(); fits.disconnect();
    model.off('change:seq', show); model.off('change:ack', acknowledged);
    model.off('change:said', say); model.off('change:status', complain);
  };
}
export default { render };
