// The tool bar over a picture in space: views, cut, colours, loads, measuring, materials.
function toolbar(model, send, slides) {
  const node = element('div', {className: 'tools', role: 'toolbar'});
  node.setAttribute('aria-label', 'Tools of the picture');
  node.addEventListener('keydown', e => e.stopPropagation());   // the notebook has keys of its own
  let now = {};
  const tool = (text, name, title, act) => {
    const made = element('button', {type: 'button', textContent: text, title, onclick: act});
    made.setAttribute('aria-label', name);
    return made;
  };
  const pressed = (button, on) => button.setAttribute('aria-pressed', String(!!on));
  const view = (to, name, key) => tool(to, name, `${name} (key ${key})`, () => send({kind: 'view', to: key}));
  const acts = {
    f: () => send({kind: 'fit'}),
    m: () => send({kind: 'measure', on: !now.measuring}),
    o: () => send({kind: 'other side'}),
    c: () => moved('xyz'['xyz'.indexOf(now.axis) + 1] || 'x', Number(slider.value)),
    '[': () => moved(now.axis, now.share - now.step),
    ']': () => moved(now.axis, now.share + now.step),
  };
  const fit = tool('Fit', 'Fit the part into the picture', 'Fit (key f)', acts.f);
  const ruler = tool('Measure', 'Measure between two places', 'Measure between two clicks (key m)', acts.m);
  const loads = tool('Loads', 'Draw loads and supports', 'Draw loads and supports (key l)',
    () => send({kind: 'loads', on: !now.loads}));
  const shot = tool('PNG', 'Download the picture as PNG', 'Download the picture, twice as large',
    () => send({kind: 'picture'}));
  const one = tool('One picture', 'Back to one picture', 'Back to one picture', () => send({kind: 'one'}));

  const slider = element('input', {type: 'range', min: 0, max: 1, step: 0.01});
  slider.setAttribute('aria-label', 'Cut away');
  const axis = element('select', {title: 'Axis of the cut (key c)'},
    ...['x', 'y', 'z'].map(a => element('option', {value: a, textContent: a})));
  axis.setAttribute('aria-label', 'Axis of the cut');
  const other = tool('Other side', 'Other side of the cut', 'Cut away the other side (key o)', acts.o);
  const plane = element('output', {className: 'plane'});
  const moved = (along, share) => {
    slides();
    now = {...now, axis: along, share: Math.min(Math.max(share, 0), 1)};
    slider.value = now.share; axis.value = along;
    send({kind: 'cut', share: now.share, axis: along, above: now.above});
  };
  slider.addEventListener('input', () => moved(axis.value, Number(slider.value)));
  axis.addEventListener('change', () => moved(axis.value, Number(slider.value)));

  const pick = (name, kind, unit = '') => {
    const select = element('select', {onchange: () => send({kind, value: select.value})});
    const label = element('label', {}, name, select, unit);
    return {select, label};
  };
  const typed = (name, kind, title) => {
    const input = element('input', {type: 'text', inputMode: 'decimal', className: 'number', title});
    input.setAttribute('aria-label', title);
    let before = '';
    const go = () => { if (input.value !== before) { before = input.value; send({kind, value: input.value}); } };
    input.addEventListener('change', go);
    input.addEventListener('keydown', e => { if (e.key === 'Enter') go(); });
    const put = value => { if (document.activeElement !== input) input.value = before = value; };
    return {label: element('label', {}, name, input), put};
  };
  const colour = pick('Colour', 'paint'), load = pick('Case', 'case');
  const factor = typed('Deformed \u00d7', 'factor', 'Displacements drawn larger by this factor');
  const below = typed('Safety below', 'below', 'Only voxels with safety below this; empty for all');
  const materials = element('div', {className: 'row materials', role: 'group'});
  materials.setAttribute('aria-label', 'Materials and bodies: shown, ghost or hidden');
  const answers = element('div', {className: 'row'}, colour.label, load.label, factor.label, below.label);
  node.append(
    element('div', {className: 'row'},
      view('x', 'View along x', 'x'), view('y', 'View along y', 'y'), view('z', 'View along z', 'z'),
      view('Iso', 'View from a corner', 'i'), fit, ruler, loads, shot, one),
    element('div', {className: 'row'}, element('label', {}, 'Cut', axis), slider, plane, other),
    answers, materials);

  const NEXT = {shown: 'ghost', ghost: 'hidden', hidden: 'shown'};
  let listed = '';
  function list(found) {
    const text = JSON.stringify(found);
    if (text === listed) return;
    listed = text;
    const focused = document.activeElement?.dataset?.material;
    materials.replaceChildren(...found.map(([name, shade, how]) => {
      const swatch = element('span', {className: 'swatch'});
      if (shade) swatch.style.background = shade; else swatch.classList.add('none');
      const button = element('button', {type: 'button', className: `material ${how}`,
        title: `${name}: ${how}; press for ${NEXT[how]}`,
        onclick: () => send({kind: 'see', name, how: NEXT[how]})}, swatch,
        how === 'shown' ? name : `${name} (${how})`);
      button.dataset.material = name;
      return button;
    }));
    if (focused) [...materials.children].find(b => b.dataset.material === focused)?.focus();
  }
  function options(place, names, chosen) {
    if (JSON.stringify(names) !== place.dataset.names) {
      place.dataset.names = JSON.stringify(names);
      place.replaceChildren(...names.map(n => element('option', {value: n, textContent: n})));
    }
    place.value = chosen;
  }
  function update(found, free) {                       // not under the hand that drags the slider
    now = free ? found : {...found, axis: now.axis, share: now.share};
    slider.step = now.step || 0.01;
    if (free) { slider.value = found.share; axis.value = found.axis; }
    plane.textContent = found.plane;
    slider.setAttribute('aria-valuetext', found.plane);
    pressed(ruler, found.measuring);
    pressed(other, found.above);
    loads.hidden = found.loads === undefined;
    pressed(loads, found.loads);
    one.hidden = !found.several;
    const paints = found.paints || [], cases = found.cases || [];
    options(colour.select, paints, found.painted);
    colour.label.hidden = paints.length < 2;
    options(load.select, cases, found.case);
    load.label.hidden = cases.length < 2;
    factor.label.hidden = found.factor === null || found.factor === undefined;
    factor.put(found.factor ?? '');
    below.label.hidden = found.below === undefined || factor.label.hidden;
    below.put(found.below ?? '');
    answers.hidden = [...answers.children].every(n => n.hidden);
    list(found.materials || []);
  }
  function key(name) {
    if ('xyzi'.includes(name)) send({kind: 'view', to: name});
    else if (name === 'l' && now.loads !== undefined) send({kind: 'loads', on: !now.loads});
    else if (acts[name]) acts[name]();
    else return false;
    return true;
  }
  return {node, update, key};
}
