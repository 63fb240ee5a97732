// The ground: lines a quarter and a whole metre apart that fade outwards, and a soft shadow.
//
// The shadow is a picture of the bones from below the floor, drawn small, that the floor's shader blurs.

import * as three from "three";
import { colour } from "./theme.js";

const PIXELS = 256;

const VERTEX = `
varying vec3 place;
void main() {
  vec4 world = modelMatrix * vec4(position, 1.0);
  place = world.xyz;
  gl_Position = projectionMatrix * viewMatrix * world;
}`;

const FRAGMENT = `
uniform sampler2D shadow;
uniform vec3 first, second, centre, lines, dark;
uniform float reach, half_width, strength;
varying vec3 place;
float line(vec2 at, float spacing, float thick) {
  vec2 cells = at / spacing;
  vec2 away = abs(fract(cells - 0.5) - 0.5) / fwidth(cells);
  return 1.0 - clamp(min(away.x, away.y) - thick, 0.0, 1.0);
}
void main() {
  vec2 at = vec2(dot(place, first), dot(place, second));
  vec2 off = at - vec2(dot(centre, first), dot(centre, second));
  float fade = 1.0 - smoothstep(0.25 * reach, reach, length(off));
  float grid = max(0.35 * line(at, 0.25, 0.0), 0.8 * line(at, 1.0, 0.3));
  float covered = 0.0;
  vec2 middle = 0.5 + 0.5 * off / half_width;
  for (int i = -3; i <= 3; i++) {
    for (int j = -3; j <= 3; j++) {
      covered += texture2D(shadow, middle + vec2(float(i), float(j)) * 1.4 / ${PIXELS}.0).r;
    }
  }
  covered *= strength / 49.0;
  float inside = step(max(abs(middle.x - 0.5), abs(middle.y - 0.5)), 0.5);
  covered *= inside;
  float opacity = max(grid * fade, covered);
  gl_FragColor = vec4(mix(lines, dark, covered / max(opacity, 1e-4)), opacity);
}`;

export class Floor {
  constructor(renderer, scene, up, height, span) {
    this.renderer = renderer;
    this.up = up;
    this.height = height;
    this.reach = Math.max(2.2 * span, 0.6);
    this.half = 0.75 * span;
    this.first = new three.Vector3(Math.abs(up.z), Math.abs(up.x), Math.abs(up.y));
    this.second = new three.Vector3().crossVectors(up, this.first);
    this.target = new three.WebGLRenderTarget(PIXELS, PIXELS);
    this.above = new three.OrthographicCamera(-this.half, this.half, this.half, -this.half, 0, 8 * span);
    this.black = new three.MeshBasicMaterial({ color: 0xffffff });
    this.shadows = new three.Scene();
    this.material = new three.ShaderMaterial({
      vertexShader: VERTEX,
      fragmentShader: FRAGMENT,
      transparent: true,
      depthWrite: false,
      side: three.DoubleSide,
      uniforms: {
        shadow: { value: this.target.texture },
        first: { value: this.first },
        second: { value: this.second },
        centre: { value: new three.Vector3() },
        lines: { value: new three.Color() },
        dark: { value: new three.Color() },
        reach: { value: this.reach },
        half_width: { value: this.half },
        strength: { value: 0.5 },
      },
    });
    this.plane = new three.Mesh(new three.PlaneGeometry(2 * this.reach, 2 * this.reach), this.material);
    this.plane.renderOrder = -1;
    this.plane.frustumCulled = false;
    this.plane.quaternion.setFromRotationMatrix(
      new three.Matrix4().makeBasis(this.first, this.second, up),
    );
    scene.add(this.plane);
  }

  paint() {
    const { lines, dark, strength } = this.material.uniforms;
    lines.value.set(colour("grid")).convertLinearToSRGB();
    dark.value.set(colour("shadow")).convertLinearToSRGB();
    strength.value = Number(colour("shadow-strength"));
  }

  draw(bones, shown, middle) {
    const centre = middle.clone();
    centre.addScaledVector(this.up, this.height - centre.dot(this.up));
    this.plane.position.copy(centre);
    this.material.uniforms.centre.value.copy(centre);
    // Seen from under the floor with `second` upwards, `first` runs to the left; so look from above.
    this.above.up.copy(this.second);
    this.above.position.copy(centre).addScaledVector(this.up, 7 * this.half);
    this.above.lookAt(centre);
    this.shadows.overrideMaterial = this.black;
    const parents = bones.map((bone) => bone.parent);
    const seen = bones.map((bone) => bone.visible);
    for (const bone of bones) {
      bone.visible = bone.posed && shown;
      this.shadows.add(bone);
    }
    this.renderer.setRenderTarget(this.target);
    this.renderer.setClearColor(0x000000, 1);
    this.renderer.clear();
    this.renderer.render(this.shadows, this.above);
    this.renderer.setRenderTarget(null);
    this.renderer.setClearColor(0x000000, 0);
    bones.forEach((bone, i) => {
      parents[i].add(bone);
      bone.visible = seen[i];
    });
  }
}
