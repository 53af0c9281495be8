// JPEG frames of the part in space, turned with mouse or keys, cut away with a slider.
function render({model, el}) {
  const image = element('img', {tabIndex: 0, draggable: false});
  image.setAttribute('aria-description',
    'Drag or arrow keys turn, plus and minus zoom, x, y, z and i choose a view.');
  const cut = element('input', {type: 'range', min: 0, max: 0.95, step: 0.01});
  cut.setAttribute('aria-label', 'Cut away');
  const axis = element('select', {}, ...['x', 'y', 'z'].map(a => element('option', {value: a, textContent: a})));
  const key = element('div', {className: 'row legend'});
  const line = element('div', {className: 'status', role: 'status'});
  const row = element('div', {className: 'row'}, element('label', {}, 'Cut away ', cut),
    element('label', {}, 'along ', axis),
    element('span', {}, 'Drag to turn, wheel to zoom, keys x y z i for views.'));
  el.append(element('div', {className: 'vm'}, row, image, key, line));
  let address = null, drag = null, busy = false, pending = null, sent = 0;

  function show() {
    image.alt = model.get('label');
    cut.value = model.get('cut'); axis.value = model.get('cut_axis');
    legend(model, key);
    const data = model.get('frame');
    if (!data.byteLength) return;
    const old = address;
    address = URL.createObjectURL(new Blob([data], {type: 'image/jpeg'}));
    image.onload = () => {
      if (old) URL.revokeObjectURL(old);
      image.dataset.seq = model.get('seq');
      busy = false;
      if (pending) { const next = pending; pending = null; send(next); }
    };
    image.src = address;
  }
  function send(message) {                           // one frame on its way, drags add up
    if (busy) {
      if (pending && pending.kind === 'turn' && message.kind === 'turn') {
        pending.dx += message.dx; pending.dy += message.dy;
      } else pending = message;
      return;
    }
    busy = true; sent = performance.now();
    model.send(message);
    setTimeout(() => { if (busy && performance.now() - sent > 4900) busy = false; }, 5000);
  }
  image.addEventListener('pointerdown', e => {
    image.setPointerCapture(e.pointerId); drag = [e.clientX, e.clientY]; image.focus(); e.preventDefault();
  });
  image.addEventListener('pointermove', e => {
    if (!drag) return;
    send({kind: 'turn', dx: e.clientX - drag[0], dy: e.clientY - drag[1], moving: true});
    drag = [e.clientX, e.clientY];
  });
  const release = () => { if (drag) { drag = null; send({kind: 'still'}); } };
  image.addEventListener('pointerup', release);
  image.addEventListener('pointercancel', release);
  image.addEventListener('wheel', e => {
    send({kind: 'zoom', factor: e.deltaY < 0 ? 1.1 : 1 / 1.1}); e.preventDefault();
  }, {passive: false});
  image.addEventListener('keydown', e => {
    const turn = {ArrowLeft: [-20, 0], ArrowRight: [20, 0], ArrowUp: [0, -20], ArrowDown: [0, 20]}[e.key];
    if (turn) send({kind: 'turn', dx: turn[0], dy: turn[1]});
    else if (e.key === '+' || e.key === '=') send({kind: 'zoom', factor: 1.1});
    else if (e.key === '-') send({kind: 'zoom', factor: 1 / 1.1});
    else if ('xyzi'.includes(e.key)) send({kind: 'view', to: e.key});
    else return;
    e.preventDefault(); e.stopPropagation();
  });
  cut.addEventListener('input', () => send({kind: 'cut', share: Number(cut.value), axis: axis.value}));
  cut.addEventListener('keydown', e => e.stopPropagation());
  axis.addEventListener('change', () => send({kind: 'cut', share: Number(cut.value), axis: axis.value}));
  model.on('change:seq', show);
  model.on('change:status', () => status(model, line));
  show(); status(model, line);
}
export default { render };
