// The fitted skeleton among its markers, in three dimensions, drawn only when something changed.

import * as three from "three";
import { OrbitControls } from "three/examples/jsm/controls/OrbitControls.js";
import { partsOf, worstMarker } from "./trial.js";
import { colour, onTheme } from "./theme.js";
import { Floor } from "./floor.js";

const MARKER = 0.0056; // radius as a share of what the figure spans
const LENS = 24; // degrees
const FAR_OFF = 0.04; // m; the worst marker is named when it is further off
const LABEL = 24; // pixels from one name to the next
const FOLLOW = 0.4; // s to either side over which the camera's path is averaged
export const VIEWS = {
  oblique: [38, 11],
  front: [0, 4],
  right: [90, 4],
  back: [180, 4],
  left: [270, 4],
  top: [0, 89],
};

export function canDraw() {
  try {
    return Boolean(document.createElement("canvas").getContext("webgl2"));
  } catch {
    return false;
  }
}

export class Scene {
  constructor(trial, clock, box) {
    Object.assign(this, { trial, clock, box });
    this.times = 3; // residuals are drawn so many times longer
    this.shown = { bones: true, glass: false, sticks: false, measured: true, fitted: true, residuals: true };
    this.follow = true;
    this.renderer = new three.WebGLRenderer({
      antialias: true,
      alpha: true,
      preserveDrawingBuffer: true, // for the printer
    });
    box.prepend(this.renderer.domElement);
    this.scene = new three.Scene();
    this.up = new three.Vector3(...trial.up);
    this.forward = new three.Vector3(...trial.forward);
    this.#light();
    this.#measureFigure();
    this.#addBones();
    this.#addMarkers();
    this.floor = new Floor(this.renderer, this.scene, this.up, trial.floor, this.span);
    this.#addCamera();
    this.labels = [...Array(3)].map(() => {
      const label = document.createElement("div");
      label.className = "label";
      box.append(label);
      return label;
    });
    onTheme(() => {
      this.#paint();
      this.change();
    });
    this.#paint();
    clock.on("row", () => this.change());
    clock.on("markers", () => this.change());
    new ResizeObserver(() => this.#resize()).observe(box);
    this.#resize();
    this.look("oblique");
  }

  set(name, value) {
    this.shown[name] = value;
    this.change();
  }

  lengthen(times) {
    this.times = times;
    this.change();
  }

  change() {
    if (this.waiting) return;
    this.waiting = true;
    requestAnimationFrame(() => {
      this.waiting = false;
      this.#draw();
    });
  }

  look(view) {
    const [turned, raised] = VIEWS[view].map((degrees) => (degrees * Math.PI) / 180);
    const side = new three.Vector3().crossVectors(this.forward, this.up);
    const level = this.forward.clone().multiplyScalar(Math.cos(turned));
    level.addScaledVector(side, Math.sin(turned));
    const towards = level.multiplyScalar(Math.cos(raised)).addScaledVector(this.up, Math.sin(raised));
    const narrow = Math.min(1, this.camera.aspect);
    const away = (0.55 * this.span) / Math.tan((LENS * Math.PI) / 360) / narrow;
    this.target = this.#middle(this.clock.row);
    this.controls.target.copy(this.target);
    this.camera.position.copy(this.target).addScaledVector(towards, away);
    this.controls.update();
    this.change();
  }

  #light() {
    this.scene.add(new three.HemisphereLight(0xffffff, 0x9aa4b4, 2.0));
    this.lamp = new three.DirectionalLight(0xffffff, 1.9);
    this.scene.add(this.lamp, this.lamp.target);
  }

  // How large the figure is (m) and where its middle goes, averaged so that a camera follows calmly.
  #measureFigure() {
    const { trial } = this;
    const { origin } = trial.arrays;
    this.span = 0.3;
    for (let row = 0; row < trial.rows; row += Math.max(1, Math.floor(trial.rows / 20))) {
      const box = new three.Box3();
      for (const places of [trial.arrays.fitted, origin]) {
        for (let i = 0; i < places.length / 3; i++) {
          const place = partsOf(places, i, row);
          if (place.every(Number.isFinite)) box.expandByPoint(new three.Vector3(...place));
        }
      }
      if (!box.isEmpty()) this.span = Math.max(this.span * 0.999, box.getSize(new three.Vector3()).length());
    }
    const rate = trial.rows > 1 ? (trial.rows - 1) / (trial.time[trial.rows - 1] - trial.time[0]) : 1;
    const half = Math.round(FOLLOW * rate);
    this.path = [0, 1, 2].map((axis) => averaged(this.#middles(axis), half));
  }

  // The middle of all fitted places, row by row.
  #middles(axis) {
    const { trial } = this;
    const places = [...trial.arrays.origin, ...trial.arrays.fitted];
    const found = new Float64Array(trial.rows);
    let before = 0;
    for (let row = 0; row < trial.rows; row++) {
      let low = Infinity;
      let high = -Infinity;
      for (let i = axis; i < places.length; i += 3) {
        const value = places[i][row];
        if (value < low) low = value;
        if (value > high) high = value;
      }
      before = low <= high ? (low + high) / 2 : before;
      found[row] = before;
    }
    return found;
  }

  #middle(row) {
    return new three.Vector3(...this.path.map((values) => values[row]));
  }

  #addBones() {
    const { trial } = this;
    this.bones = trial.segments.map((segment, index) => {
      const points = trial.arrays[`bone points ${index}`];
      const faces = trial.arrays[`bone faces ${index}`];
      const shape = new three.BufferGeometry();
      shape.setAttribute("position", new three.BufferAttribute(interleaved(points), 3));
      const corners = new Uint32Array(3 * faces[0].length);
      for (let i = 0; i < faces[0].length; i++) {
        const first = faces[0][i];
        corners.set([first, first + faces[1][i], first + faces[2][i]], 3 * i);
      }
      shape.setIndex(new three.BufferAttribute(corners, 1));
      shape.computeVertexNormals();
      const mesh = new three.Mesh(shape, new three.MeshLambertMaterial());
      mesh.matrixAutoUpdate = false;
      mesh.frustumCulled = false;
      mesh.side = segment.side || "middle";
      this.scene.add(mesh);
      return mesh;
    });
    const count = trial.sticks.length;
    const rod = new three.CylinderGeometry(1, 1, 1, 8);
    this.sticks = new three.InstancedMesh(rod, new three.MeshLambertMaterial(), Math.max(count, 1));
    this.sticks.frustumCulled = false;
    this.scene.add(this.sticks);
  }

  #addMarkers() {
    const count = Math.max(this.trial.markers.length, 1);
    const ball = new three.SphereGeometry(1, 16, 12);
    const rod = new three.CylinderGeometry(1, 1, 1, 8);
    const make = (shape, name) => {
      const mesh = new three.InstancedMesh(shape, new three.MeshLambertMaterial(), count);
      mesh.frustumCulled = false;
      mesh.paint = name;
      this.scene.add(mesh);
      return mesh;
    };
    this.measured = make(ball, "measured");
    this.fitted = make(ball, "fitted");
    this.leftOut = make(ball, "left-out");
    this.residuals = make(rod, "look");
    this.picked = make(ball, "look");
    this.picked.material.transparent = true;
    this.picked.material.opacity = 0.35;
    this.picked.material.depthWrite = false;
  }

  #addCamera() {
    this.camera = new three.PerspectiveCamera(LENS, 1, 0.02 * this.span, 60 * this.span);
    this.camera.up.copy(this.up);
    this.controls = new OrbitControls(this.camera, this.renderer.domElement);
    this.controls.minDistance = 0.2 * this.span;
    this.controls.maxDistance = 12 * this.span;
    this.controls.addEventListener("change", () => this.change());
    this.controls.listenToKeyEvents = () => {}; // the arrow keys belong to the clock
  }

  #paint() {
    for (const bone of this.bones) bone.material.color.set(colour(`bone-${bone.side}`));
    this.sticks.material.color.set(colour("stick"));
    for (const mesh of [this.measured, this.fitted, this.leftOut, this.residuals, this.picked]) {
      mesh.material.color.set(colour(mesh.paint));
    }
    this.floor.paint();
  }

  #resize() {
    const { clientWidth: width, clientHeight: height } = this.box;
    if (!width || !height) return;
    this.renderer.setPixelRatio(Math.min(devicePixelRatio || 1, 2));
    this.renderer.setSize(width, height, false);
    this.camera.aspect = width / height;
    this.camera.updateProjectionMatrix();
    this.change();
  }

  #draw() {
    const { row } = this.clock;
    if (this.follow) {
      const there = this.#middle(row);
      const step = there.clone().sub(this.target);
      this.target.copy(there);
      this.camera.position.add(step);
      this.controls.target.add(step);
    }
    this.#pose(row);
    this.#placeMarkers(row);
    this.#aimLamp();
    this.floor.draw(this.bones, this.shown.bones, this.#middle(row));
    this.renderer.render(this.scene, this.camera);
    this.#name(row);
  }

  #pose(row) {
    const { origin, turn } = this.trial.arrays;
    const one = new three.Vector3(1, 1, 1);
    this.bones.forEach((bone, index) => {
      const [w, x, y, z] = partsOf(turn, index, row, 4);
      bone.posed = Number.isFinite(w);
      bone.visible = bone.posed && this.shown.bones;
      if (!bone.posed) return;
      const place = new three.Vector3(...partsOf(origin, index, row));
      bone.matrix.compose(place, new three.Quaternion(x, y, z, w).normalize(), one);
      bone.matrixWorldNeedsUpdate = true;
      bone.material.transparent = this.shown.glass;
      bone.material.opacity = this.shown.glass ? 0.35 : 1;
      bone.material.depthWrite = !this.shown.glass;
    });
    let count = 0;
    for (const [index, ...ends] of this.trial.sticks) {
      if (!this.bones[index].posed) continue;
      const [from, to] = [ends.slice(0, 3), ends.slice(3)].map((end) =>
        new three.Vector3(...end).applyMatrix4(this.bones[index].matrix),
      );
      this.sticks.setMatrixAt(count++, rodBetween(from, to, 0.5 * MARKER * this.span));
    }
    finish(this.sticks, count, this.shown.sticks);
  }

  #placeMarkers(row) {
    const { arrays, markers, used } = this.trial;
    const radius = MARKER * this.span;
    const counts = { measured: 0, fitted: 0, leftOut: 0, residuals: 0, picked: 0 };
    this.places = markers.map((name, marker) => {
      const fitted = vector(partsOf(arrays.fitted, marker, row));
      let measured = vector(partsOf(arrays.measured, marker, row));
      const isUsed = arrays.why_not[marker][row] === used;
      if (isUsed && fitted && measured) {
        measured = fitted.clone().addScaledVector(measured.clone().sub(fitted), this.times);
        this.residuals.setMatrixAt(counts.residuals++, rodBetween(fitted, measured, 0.34 * radius));
        this.measured.setMatrixAt(counts.measured++, ballAt(measured, radius));
      } else if (measured) {
        this.leftOut.setMatrixAt(counts.leftOut++, ballAt(measured, radius));
      }
      if (fitted) this.fitted.setMatrixAt(counts.fitted++, ballAt(fitted, 0.85 * radius));
      const place = measured ?? fitted;
      if (place && this.clock.markers.includes(name)) {
        this.picked.setMatrixAt(counts.picked++, ballAt(place, 2.4 * radius));
      }
      return place;
    });
    finish(this.measured, counts.measured, this.shown.measured);
    finish(this.leftOut, counts.leftOut, this.shown.measured);
    finish(this.fitted, counts.fitted, this.shown.fitted);
    finish(this.residuals, counts.residuals, this.shown.residuals);
    finish(this.picked, counts.picked, true);
  }

  #aimLamp() {
    const back = this.camera.position.clone().sub(this.controls.target).normalize();
    const aside = new three.Vector3().crossVectors(this.up, back);
    this.lamp.target.position.copy(this.controls.target);
    this.lamp.position.copy(this.controls.target);
    this.lamp.position.addScaledVector(back, 1.0).addScaledVector(this.up, 1.2).addScaledVector(aside, -0.8);
    this.lamp.target.updateMatrixWorld();
  }

  // Names of the picked markers, and of the worst one where it is far off.
  #name(row) {
    const { markers, arrays } = this.trial;
    const named = this.clock.markers.map((name) => markers.indexOf(name)).filter((m) => m >= 0);
    const worst = worstMarker(this.trial, row);
    if (worst >= 0 && arrays.error[worst][row] > FAR_OFF && !named.includes(worst)) named.push(worst);
    const taken = [];
    this.labels.forEach((label, index) => {
      const place = named[index] === undefined ? undefined : this.places[named[index]];
      label.hidden = !place;
      if (!place) return;
      const seen = place.clone().project(this.camera);
      const error = arrays.error[named[index]][row];
      const far = Number.isFinite(error) ? ` ${(1000 * error).toFixed(0)} mm` : "";
      label.textContent = markers[named[index]] + far;
      const x = ((seen.x + 1) / 2) * this.box.clientWidth;
      let y = ((1 - seen.y) / 2) * this.box.clientHeight;
      while (taken.some((other) => Math.abs(other - y) < LABEL)) y += 1;
      taken.push(y);
      const flip = x > 0.75 * this.box.clientWidth;
      label.style.transform = `translate(${x + (flip ? -12 : 12)}px, ${y - 9}px) translateX(${flip ? -100 : 0}%)`;
    });
  }
}

function averaged(values, half) {
  const sums = new Float64Array(values.length + 1);
  for (let i = 0; i < values.length; i++) sums[i + 1] = sums[i] + values[i];
  return values.map((_, i) => {
    const reach = Math.min(half, i, values.length - 1 - i);
    return (sums[i + reach + 1] - sums[i - reach]) / (2 * reach + 1);
  });
}

function interleaved(channels) {
  const found = new Float32Array(3 * channels[0].length);
  for (let i = 0; i < channels[0].length; i++) {
    for (let axis = 0; axis < 3; axis++) found[3 * i + axis] = channels[axis][i];
  }
  return found;
}

const vector = (parts) => (parts.every(Number.isFinite) ? new three.Vector3(...parts) : undefined);

function ballAt(place, radius) {
  return new three.Matrix4().makeScale(radius, radius, radius).setPosition(place);
}

const Y = new three.Vector3(0, 1, 0);

function rodBetween(from, to, radius) {
  const along = to.clone().sub(from);
  const length = Math.max(along.length(), 1e-6);
  const turn = new three.Quaternion().setFromUnitVectors(Y, along.divideScalar(length));
  const middle = from.clone().add(to).multiplyScalar(0.5);
  return new three.Matrix4().compose(middle, turn, new three.Vector3(radius, length, radius));
}

function finish(mesh, count, visible) {
  mesh.count = count;
  mesh.visible = visible && count > 0;
  mesh.instanceMatrix.needsUpdate = true;
}
